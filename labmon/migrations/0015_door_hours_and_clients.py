# What the door counted by the hour, and what bench clients told of themselves.

import django.contrib.postgres.fields
import django.db.models.deletion
from django.db import migrations, models


class Migration(migrations.Migration):

    dependencies = [
        ('ingest', '0007_day_files'),
        ('labmon', '0014_run_ledgers'),
    ]

    operations = [
        migrations.CreateModel(
            name='ClientState',
            fields=[
                ('station', models.OneToOneField(on_delete=django.db.models.deletion.CASCADE, primary_key=True, related_name='client', serialize=False, to='ingest.station')),
                ('told_at', models.DateTimeField()),
                ('waiting', models.BigIntegerField(null=True)),
                ('dropped', models.BigIntegerField(null=True)),
                ('restarts', models.BigIntegerField(null=True)),
                ('clock', models.CharField(blank=True, max_length=200)),
                ('mute', django.contrib.postgres.fields.ArrayField(base_field=models.CharField(max_length=63), default=list, help_text='Taps whose instrument does not answer.', size=None)),
            ],
        ),
        migrations.CreateModel(
            name='DoorHour',
            fields=[
                ('id', models.BigAutoField(auto_created=True, primary_key=True, serialize=False, verbose_name='ID')),
                ('hour_at', models.DateTimeField(db_index=True)),
                ('known', models.BigIntegerField(default=0)),
                ('disordered', models.BigIntegerField(default=0)),
                ('station', models.ForeignKey(on_delete=django.db.models.deletion.CASCADE, related_name='door_hours', to='ingest.station')),
            ],
            options={
                'constraints': [models.UniqueConstraint(fields=('station', 'hour_at'), name='door_hour_once')],
            },
        ),
    ]
