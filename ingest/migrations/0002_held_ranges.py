"""What Django's fields cannot say: the multirange of held sequences, and bodies stored as they are."""

from django.db import migrations


class Migration(migrations.Migration):
    dependencies = [("ingest", "0001_initial")]

    operations = [
        migrations.RunSQL(
            "ALTER TABLE ingest_tapboot ADD COLUMN held int8multirange NOT NULL DEFAULT '{}'",
            "ALTER TABLE ingest_tapboot DROP COLUMN held",
        ),
        migrations.RunSQL(
            "ALTER TABLE ingest_inboxrow ALTER COLUMN body SET STORAGE EXTERNAL;"
            "ALTER TABLE ingest_block ALTER COLUMN body SET STORAGE EXTERNAL",
            migrations.RunSQL.noop,
        ),
    ]
