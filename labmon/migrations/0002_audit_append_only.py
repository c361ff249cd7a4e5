"""The audit can only grow."""

from django.db import migrations

FORWARD = """
CREATE FUNCTION labmon_refuse_audit_change() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN RAISE EXCEPTION 'the audit is append-only'; END $$;
CREATE TRIGGER audit_append_only BEFORE UPDATE OR DELETE ON labmon_auditentry
    FOR EACH ROW EXECUTE FUNCTION labmon_refuse_audit_change();
"""
BACK = "DROP TRIGGER audit_append_only ON labmon_auditentry; DROP FUNCTION labmon_refuse_audit_change();"


class Migration(migrations.Migration):
    dependencies = [("labmon", "0001_initial")]
    operations = [migrations.RunSQL(FORWARD, BACK)]
