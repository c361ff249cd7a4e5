from django.db import migrations, models


class Migration(migrations.Migration):
    """No writer can store a state that the alarm's facts do not give."""

    dependencies = [("labmon", "0005_alarm_facts_from_states")]

    operations = [
        migrations.AddConstraint(
            model_name='alarm',
            constraint=models.CheckConstraint(condition=models.Q(models.Q(('is_withdrawn', True), ('state', 'normal')), models.Q(('is_withdrawn', False), ('returned_at', None), ('is_out_of_service', True), ('state', 'out-of-service')), models.Q(('is_withdrawn', False), ('returned_at', None), ('is_out_of_service', False), ('is_suppressed', True), ('state', 'suppressed')), models.Q(('is_withdrawn', False), ('returned_at', None), ('is_out_of_service', False), ('is_suppressed', False), ('shelved_until__isnull', False), ('state', 'shelved')), models.Q(('is_withdrawn', False), ('returned_at', None), ('is_out_of_service', False), ('is_suppressed', False), ('shelved_until', None), ('acknowledged_at__isnull', False), ('state', 'acknowledged')), models.Q(('is_withdrawn', False), ('returned_at', None), ('is_out_of_service', False), ('is_suppressed', False), ('shelved_until', None), ('acknowledged_at', None), ('state', 'unacknowledged')), models.Q(('is_withdrawn', False), ('returned_at__isnull', False), models.Q(('acknowledged_at__isnull', False), ('is_late', True), ('is_out_of_service', True), ('is_suppressed', True), ('shelved_until__isnull', False), _connector='OR'), ('state', 'normal')), models.Q(('is_withdrawn', False), ('returned_at__isnull', False), ('is_out_of_service', False), ('is_suppressed', False), ('shelved_until', None), ('acknowledged_at', None), ('is_late', False), ('state', 'returned-unacknowledged')), _connector='OR'), name='alarm_state_follows_from_its_facts'),
        ),
    ]
