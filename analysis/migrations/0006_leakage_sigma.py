# A leakage has an uncertainty of its own: near the ceiling it decides.


from django.db import migrations, models


class Migration(migrations.Migration):

    dependencies = [
        ('analysis', '0005_day_statistics'),
    ]

    operations = [
        migrations.AddField(
            model_name='calibration',
            name='leakage_sigma',
            field=models.JSONField(help_text='1 sigma of each entry of leakage; empty: taken as exact.', null=True),
        ),
    ]
