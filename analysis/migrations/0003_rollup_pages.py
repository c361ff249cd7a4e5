"""Closed days' rollups lie in pages, column by column; what was in buffers of a day is marked to be made anew from the readings."""

import django.contrib.postgres.fields
import django.db.models.deletion
from django.db import migrations, models

MAKE_ANEW = """
INSERT INTO analysis_rollupdue (tap_id, level_s, first_at_us, last_at_us)
SELECT tap_id, 10, day_us, day_us + 86399999999 FROM analysis_rollupday WHERE level_s = 10
"""


class Migration(migrations.Migration):

    dependencies = [
        ('analysis', '0002_tap_checkpoints'),
        ('ingest', '0005_rows_go_with_their_tap'),
    ]

    operations = [
        migrations.CreateModel(
            name='RollupPage',
            fields=[
                ('pk', models.CompositePrimaryKey('tap_id', 'level_s', 'page_us', blank=True, editable=False, primary_key=True, serialize=False)),
                ('level_s', models.IntegerField()),
                ('page_us', models.BigIntegerField()),
                ('layout', models.SmallIntegerField()),
                ('count', models.IntegerField()),
                ('ends', django.contrib.postgres.fields.ArrayField(base_field=models.IntegerField(), size=None)),
                ('body', models.BinaryField()),
                ('tap', models.ForeignKey(db_index=False, on_delete=django.db.models.deletion.CASCADE, to='ingest.tap')),
            ],
        ),
        # Compressed already; so stored, the database can hand out a part of it without reading the rest.
        migrations.RunSQL("ALTER TABLE analysis_rolluppage ALTER COLUMN body SET STORAGE EXTERNAL", migrations.RunSQL.noop),
        migrations.RunSQL(MAKE_ANEW, migrations.RunSQL.noop),
        migrations.DeleteModel(
            name='RollupDay',
        ),
    ]
