"""What leaves the house: written with what it tells of, handed over later; one row a message, one a channel of it."""

from django.conf import settings
from django.db import models
from django.db.models import Q


class MessageKind(models.TextChoices):
    """Why someone is told."""

    CALL = "call"
    BACK = "back", "quiet time over"
    REMINDER = "reminder"
    PASSED_ON = "passed-on", "passed on"
    TAKEN = "taken"
    NOTICE = "notice"


class Channel(models.TextChoices):
    MAIL = "mail"
    PUSH = "push", "browser notification"
    WEBHOOK = "webhook"


class Message(models.Model):
    """Something told to someone, once: ``key`` makes it one message for each reason to tell.

    ``person`` is null for what goes to a webhook, to bare addresses or to the lab's own mailbox.
    """

    key = models.CharField(max_length=150, unique=True)
    kind = models.CharField(max_length=10, choices=MessageKind, default=MessageKind.NOTICE)
    event = models.ForeignKey("labmon.Event", models.CASCADE, null=True, related_name="messages")
    person = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="messages")
    level = models.CharField(max_length=7, blank=True, help_text="Of the event, when it was written.")
    duty = models.CharField(max_length=60, blank=True, help_text="As what they are told, such as run owner.")
    subject = models.CharField(max_length=250)
    body = models.TextField()
    path = models.CharField(max_length=200, blank=True, help_text="Where it leads, behind LABMON_PUBLIC_URL.")
    facts = models.JSONField(null=True, help_text="For programs: what a webhook posts.")
    made_at = models.DateTimeField(auto_now_add=True)

    class Meta:
        indexes = [models.Index(fields=["made_at"], name="message_by_time")]

    @property
    def recipients(self) -> list[str]:
        """Mail addresses it goes to."""
        found = self.deliveries.filter(channel=Channel.MAIL).order_by("pk").values_list("address", flat=True)
        return [address for together in found for address in together.split(", ")]


class Delivery(models.Model):
    """A message on one channel to one address; tried until it is handed over or cannot be."""

    message = models.ForeignKey(Message, models.CASCADE, related_name="deliveries")
    channel = models.CharField(max_length=7, choices=Channel)
    address = models.CharField(max_length=1000, help_text="Mail addresses with commas between, or what names the device or hook.")
    device = models.ForeignKey("labmon.PushDevice", models.CASCADE, null=True, related_name="deliveries")
    webhook = models.ForeignKey("labmon.Webhook", models.CASCADE, null=True, related_name="deliveries")
    next_try_at = models.DateTimeField()
    tries = models.PositiveIntegerField(default=0)
    sent_at = models.DateTimeField(null=True)
    gave_up_at = models.DateTimeField(null=True)
    last_error = models.CharField(max_length=500, blank=True)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["message", "channel", "address"], name="delivery_once")]
        indexes = [
            models.Index(fields=["next_try_at"], condition=Q(sent_at=None, gave_up_at=None), name="delivery_waiting"),
        ]


class DeliveryTry(models.Model):
    """One attempt, for the log; an attempt without outcome was cut short (its worker died)."""

    delivery = models.ForeignKey(Delivery, models.CASCADE, related_name="attempts")
    at = models.DateTimeField()
    took_s = models.FloatField(null=True)
    is_handed_over = models.BooleanField(null=True)
    said = models.CharField(max_length=500, blank=True)


class KeyPurpose(models.TextChoices):
    WEBHOOK = "webhook"
    PUSH = "push"


class SigningKey(models.Model):
    """A private key of the lab's: Ed25519 for webhooks, P-256 for Web Push. Made once; a newer one takes over."""

    purpose = models.CharField(max_length=7, choices=KeyPurpose)
    private_pem = models.TextField()
    made_at = models.DateTimeField(auto_now_add=True)
    retired_at = models.DateTimeField(null=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["purpose"], condition=Q(retired_at=None), name="one_signing_key_in_force"),
        ]


class PushDevice(models.Model):
    """A browser that someone asked to be told on (RFC 8030); bound to the key that it subscribed with."""

    person = models.ForeignKey(settings.AUTH_USER_MODEL, models.CASCADE, related_name="devices")
    key = models.ForeignKey(SigningKey, models.PROTECT, related_name="devices")
    endpoint = models.CharField(max_length=1000)
    p256dh = models.CharField(max_length=200)
    auth = models.CharField(max_length=100)
    name = models.CharField(max_length=100)
    made_at = models.DateTimeField(auto_now_add=True)
    ended_at = models.DateTimeField(null=True)
    ended_why = models.CharField(max_length=200, blank=True)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["endpoint"], condition=Q(ended_at=None), name="one_device_an_endpoint")]


class Webhook(models.Model):
    """An address that is posted every event of the lab, signed (RFC 9421)."""

    name = models.CharField(max_length=100)
    url = models.CharField(max_length=500)
    made_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    made_at = models.DateTimeField(auto_now_add=True)
    ended_at = models.DateTimeField(null=True)


class QuietHours(models.Model):
    """When someone is not to be called, save for runs of their own. From and until are minutes of their local day."""

    person = models.OneToOneField(settings.AUTH_USER_MODEL, models.CASCADE, primary_key=True, related_name="quiet_hours")
    from_minute = models.PositiveSmallIntegerField()
    until_minute = models.PositiveSmallIntegerField()
    zone = models.CharField(max_length=64, default="UTC")

    class Meta:
        constraints = [
            models.CheckConstraint(
                condition=Q(from_minute__lt=1440, until_minute__lt=1440) & ~Q(from_minute=models.F("until_minute")),
                name="quiet_hours_within_a_day",
            ),
        ]
