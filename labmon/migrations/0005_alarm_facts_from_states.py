from django.db import migrations

#: Until now the state itself remembered that an alarm was suppressed; one that returned needing nobody was so, too.
SUPPRESSED = """
    UPDATE labmon_alarm SET is_suppressed = true
    WHERE NOT is_suppressed AND NOT is_withdrawn
      AND (state = 'suppressed' OR (state = 'normal' AND returned_at IS NOT NULL AND acknowledged_at IS NULL AND NOT is_late))
"""
FOLLOWING = """
    CASE WHEN is_withdrawn THEN 'normal'
         WHEN returned_at IS NOT NULL THEN
              CASE WHEN acknowledged_at IS NOT NULL OR is_late OR is_suppressed THEN 'normal' ELSE 'returned-unacknowledged' END
         WHEN is_suppressed THEN 'suppressed'
         WHEN acknowledged_at IS NOT NULL THEN 'acknowledged'
         ELSE 'unacknowledged' END
"""


class Migration(migrations.Migration):
    """Facts of alarms told of so far, so that each state follows from them. Safe to run twice."""

    dependencies = [("labmon", "0004_alarm_holds")]

    operations = [
        migrations.RunSQL(SUPPRESSED, migrations.RunSQL.noop),
        migrations.RunSQL(
            f"UPDATE labmon_alarm SET state = {FOLLOWING} WHERE state <> {FOLLOWING}", migrations.RunSQL.noop
        ),
    ]
