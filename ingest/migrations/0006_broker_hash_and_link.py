"""Keys keep their hash for an MQTT broker; stations when a broker last told of a lost connection."""

from django.db import migrations, models


class Migration(migrations.Migration):
    dependencies = [("ingest", "0005_rows_go_with_their_tap")]

    operations = [
        migrations.AddField(
            model_name="stationkey",
            name="broker_hash",
            field=models.CharField(blank=True, default="", help_text="The key's hash for an MQTT broker's password file.",
                                   max_length=200),
            preserve_default=False,
        ),
        migrations.AddField(
            model_name="station",
            name="link_lost_at",
            field=models.DateTimeField(blank=True, help_text="When an MQTT broker last published its last will: a hint.",
                                       null=True),
        ),
    ]
