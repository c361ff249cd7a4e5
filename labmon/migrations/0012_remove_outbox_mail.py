from django.db import migrations


class Migration(migrations.Migration):
    dependencies = [("labmon", "0011_waiting_mails_move")]
    operations = [migrations.DeleteModel(name="OutboxMail")]
