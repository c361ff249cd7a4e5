"""Blocks are found by their end, boots know the smallest sequence offered, rows updated at each commit keep room."""

from django.db import migrations, models

ROOMY = ("tapboot", "tapheard", "stationboot", "doorup")


class Migration(migrations.Migration):
    dependencies = [("ingest", "0002_held_ranges")]

    operations = [
        migrations.AddIndex("block", models.Index(fields=["tap", "last_at_us"], name="block_tap_time")),
        migrations.AddField("tapboot", "lowest_sequence", models.BigIntegerField(
            null=True, help_text="Smallest sequence ever offered, also in a refused body.")),
        migrations.RunSQL(
            ";".join(f"ALTER TABLE ingest_{name} SET (fillfactor = 50)" for name in ROOMY),
            ";".join(f"ALTER TABLE ingest_{name} RESET (fillfactor)" for name in ROOMY),
        ),
    ]
