"""Each import keeps the mapping it was read in with."""

from django.db import migrations, models


class Migration(migrations.Migration):
    dependencies = [("ingest", "0003_find_blocks_by_end")]

    operations = [
        migrations.AddField(
            model_name="fileimport",
            name="rules",
            field=models.JSONField(help_text="The mapping it is read in with; empty until someone asks for it.", null=True),
        ),
    ]
