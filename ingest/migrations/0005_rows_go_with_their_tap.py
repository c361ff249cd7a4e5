"""Inbox rows and touches keep their integrity by a trigger at deletion, not by a check at every insert."""

import django.db.models.deletion
from django.db import migrations, models

TAKE_ALONG = """
    CREATE FUNCTION ingest_take_inbox_along() RETURNS trigger LANGUAGE plpgsql AS $$
    BEGIN
        DELETE FROM ingest_inboxrow WHERE tap_id = OLD.tap_id AND tap_boot_id = OLD.id;
        RETURN NULL;
    END $$;
    CREATE TRIGGER take_inbox_along AFTER DELETE ON ingest_tapboot FOR EACH ROW EXECUTE FUNCTION ingest_take_inbox_along();
    CREATE FUNCTION ingest_take_touches_along() RETURNS trigger LANGUAGE plpgsql AS $$
    BEGIN
        DELETE FROM ingest_touch WHERE tap_id = OLD.id;
        RETURN NULL;
    END $$;
    CREATE TRIGGER take_touches_along AFTER DELETE ON ingest_tap FOR EACH ROW EXECUTE FUNCTION ingest_take_touches_along();
"""
LEAVE = """
    DROP TRIGGER take_inbox_along ON ingest_tapboot;
    DROP FUNCTION ingest_take_inbox_along();
    DROP TRIGGER take_touches_along ON ingest_tap;
    DROP FUNCTION ingest_take_touches_along();
"""


def key(to: str, **options):
    return models.ForeignKey(to=to, on_delete=django.db.models.deletion.CASCADE, db_constraint=False, **options)


class Migration(migrations.Migration):
    dependencies = [("ingest", "0004_import_rules")]

    operations = [
        migrations.AlterField("inboxrow", "tap", key("ingest.tap", db_index=False)),
        migrations.AlterField("inboxrow", "tap_boot", key("ingest.tapboot", db_index=False)),
        migrations.AlterField("touch", "tap", key("ingest.tap")),
        migrations.RunSQL(TAKE_ALONG, LEAVE),
    ]
