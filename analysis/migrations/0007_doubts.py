# Spans that are doubtful until a person has spoken.

import django.db.models.deletion
from django.db import migrations, models


class Migration(migrations.Migration):

    dependencies = [
        ('analysis', '0006_leakage_sigma'),
        ('ingest', '0007_day_files'),
    ]

    operations = [
        migrations.CreateModel(
            name='Doubt',
            fields=[
                ('id', models.BigAutoField(auto_created=True, primary_key=True, serialize=False, verbose_name='ID')),
                ('reason', models.CharField(help_text='Code of the reason (analysis.reduce.trust.Reason).', max_length=20)),
                ('about', models.CharField(help_text='What it is about, once per tap and reason: a boot, a moment.', max_length=100)),
                ('from_us', models.BigIntegerField()),
                ('until_us', models.BigIntegerField(null=True)),
                ('text', models.CharField(help_text='What was seen, in words.', max_length=500)),
                ('noted_at', models.DateTimeField(auto_now_add=True)),
                ('answer', models.CharField(blank=True, choices=[('', 'not answered'), ('right', 'all is right'), ('mended', 'mended')], default='', max_length=6)),
                ('answered_at', models.DateTimeField(null=True)),
                ('answered_by', models.CharField(blank=True, help_text='Who; the audit has the person.', max_length=150)),
                ('tap', models.ForeignKey(on_delete=django.db.models.deletion.CASCADE, related_name='doubts', to='ingest.tap')),
            ],
            options={
                'constraints': [models.UniqueConstraint(fields=('tap', 'reason', 'about'), name='doubt_once')],
            },
        ),
    ]
