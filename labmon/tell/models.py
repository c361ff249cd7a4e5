"""What leaves the house: written with the event, sent later, once."""

from django.db import models


class OutboxMail(models.Model):
    """A mail that waits to be sent or was sent; ``event`` makes it one mail per event."""

    event = models.CharField(max_length=100, unique=True)
    recipients = models.JSONField()
    subject = models.CharField(max_length=250)
    body = models.TextField()
    made_at = models.DateTimeField(auto_now_add=True)
    next_try_at = models.DateTimeField(auto_now_add=True)
    tries = models.PositiveIntegerField(default=0)
    sent_at = models.DateTimeField(null=True)
    last_error = models.CharField(max_length=500, blank=True)

    class Meta:
        indexes = [models.Index(fields=["next_try_at"], condition=models.Q(sent_at__isnull=True), name="outbox_waiting")]
