"""Mails that waited in the outbox go on waiting in the new one; those that were sent stay known, so that none goes twice."""

from django.db import migrations

BATCH = 1000


def move(apps, schema_editor):
    """In batches by id; a row that was moved before is left."""
    mails = apps.get_model("labmon", "OutboxMail").objects.order_by("pk")
    message_of, delivery_of = apps.get_model("labmon", "Message"), apps.get_model("labmon", "Delivery")
    last = 0
    while rows := list(mails.filter(pk__gt=last)[:BATCH]):
        last = rows[-1].pk
        message_of.objects.bulk_create(
            [message_of(key=row.event, kind="notice", subject=row.subject, body=row.body) for row in rows], ignore_conflicts=True
        )
        made = {one.key: one.pk for one in message_of.objects.filter(key__in=[row.event for row in rows])}
        delivery_of.objects.bulk_create(
            [
                delivery_of(message_id=made[row.event], channel="mail", address=", ".join(row.recipients)[:1000],
                            next_try_at=row.next_try_at, tries=row.tries, sent_at=row.sent_at, last_error=row.last_error)
                for row in rows
            ],
            ignore_conflicts=True,
        )
        for row in rows:
            message_of.objects.filter(key=row.event).update(made_at=row.made_at)


class Migration(migrations.Migration):
    dependencies = [("labmon", "0010_events_calls_and_drills")]
    operations = [migrations.RunPython(move, migrations.RunPython.noop)]
