# How far each file of the watched folder was read, and what is wrong with it.

import django.db.models.deletion
from django.db import migrations, models


class Migration(migrations.Migration):

    dependencies = [
        ('ingest', '0007_day_files'),
    ]

    operations = [
        migrations.CreateModel(
            name='WatchedFile',
            fields=[
                ('id', models.BigAutoField(auto_created=True, primary_key=True, serialize=False, verbose_name='ID')),
                ('name', models.CharField(max_length=255)),
                ('looked_size', models.BigIntegerField(default=0, help_text='Its bytes at the last look.')),
                ('changed_ns', models.BigIntegerField(default=0, help_text='When it had been changed last, at the last look.')),
                ('is_whole', models.BooleanField(default=False, help_text='It had been at rest: its last line counts without an end.')),
                ('mapping_mark', models.CharField(blank=True, help_text='Which state of the mapping it was looked at with.', max_length=64)),
                ('read_size', models.BigIntegerField(default=0, help_text='Bytes that have been read in.')),
                ('edges', models.CharField(blank=True, max_length=64)),
                ('lines', models.BigIntegerField(default=0, help_text='Line ends within them.')),
                ('is_in_order', models.BooleanField(default=True, help_text='No line was earlier than the one before it.')),
                ('last_at_us', models.BigIntegerField(null=True)),
                ('problem', models.CharField(blank=True, max_length=500)),
                ('changed_at', models.DateTimeField(auto_now=True, help_text='When this row changed.')),
                ('record', models.ForeignKey(null=True, on_delete=django.db.models.deletion.SET_NULL, related_name='+', to='ingest.fileimport')),
                ('tap', models.ForeignKey(on_delete=django.db.models.deletion.CASCADE, related_name='watched_files', to='ingest.tap')),
            ],
            options={
                'constraints': [models.UniqueConstraint(fields=('tap', 'name'), name='watched_file_once')],
            },
        ),
    ]
