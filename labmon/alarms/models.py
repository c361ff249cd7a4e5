"""Alarms: one row an episode."""

from django.conf import settings
from django.db import models
from django.db.models import Q


class AlarmKind(models.TextChoices):
    LIMIT = "limit"
    NO_READING = "no-reading"
    UNTRUSTED = "untrusted"


class AlarmState(models.TextChoices):
    """Alarm states of IEC 62682:2014 (state names from memory of its life cycle)."""

    NORMAL = "normal"
    UNACKNOWLEDGED = "unacknowledged"
    ACKNOWLEDGED = "acknowledged"
    RETURNED_UNACKNOWLEDGED = "returned-unacknowledged"
    SHELVED = "shelved"
    SUPPRESSED = "suppressed"
    OUT_OF_SERVICE = "out-of-service"


class AlarmLevel(models.TextChoices):
    WARNING = "warning"
    ALARM = "alarm"


class Alarm(models.Model):
    """An episode that someone should know of. Times of limit alarms are data times, the rest server times."""

    kind = models.CharField(max_length=10, choices=AlarmKind)
    experiment = models.ForeignKey("labmon.Experiment", models.CASCADE, null=True, related_name="alarms")
    limit = models.ForeignKey("labmon.Limit", models.CASCADE, null=True, related_name="alarms")
    version = models.ForeignKey("labmon.LimitVersion", models.CASCADE, null=True, related_name="alarms")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, related_name="alarms")
    quantity = models.CharField(max_length=10, blank=True)
    level = models.CharField(max_length=7, choices=AlarmLevel, default=AlarmLevel.ALARM)
    state = models.CharField(max_length=24, choices=AlarmState, default=AlarmState.UNACKNOWLEDGED)
    raised_at = models.DateTimeField()
    alarm_at = models.DateTimeField(null=True, help_text="When a warning rose to an alarm.")
    returned_at = models.DateTimeField(null=True)
    acknowledged_at = models.DateTimeField(null=True)
    acknowledged_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    note = models.CharField(max_length=500, blank=True)
    value = models.FloatField(null=True, help_text="Worst value while open.")
    limit_value = models.FloatField(null=True)
    cause = models.CharField(max_length=100, blank=True)
    message = models.CharField(max_length=300)
    is_late = models.BooleanField(default=False, help_text="Found in late data, wholly in the past: nobody was called.")
    is_withdrawn = models.BooleanField(default=False, help_text="Told, but later data show it was not so.")
    noticed_at = models.DateTimeField(auto_now_add=True)
    changed = models.BigIntegerField(default=0, help_text="Counts up with each change of the row.")

    class Meta:
        constraints = [
            models.UniqueConstraint(
                fields=["limit"],
                condition=Q(kind="limit", returned_at__isnull=True, is_withdrawn=False),
                name="one_open_alarm_per_limit",
            ),
            models.UniqueConstraint(
                fields=["tap", "kind"],
                condition=Q(returned_at__isnull=True, is_withdrawn=False) & ~Q(kind="limit"),
                name="one_open_alarm_per_tap_and_kind",
            ),
        ]
        indexes = [
            models.Index(fields=["-raised_at"], name="alarm_newest"),
            models.Index(fields=["tap", "raised_at"], name="alarm_by_tap"),
            models.Index(fields=["state"], condition=~Q(state="normal"), name="alarm_not_normal"),
        ]


class AlarmBounds(models.Model):
    """Earlier bounds of a told alarm, kept when late data moved them."""

    alarm = models.ForeignKey(Alarm, models.CASCADE, related_name="earlier_bounds")
    raised_at = models.DateTimeField()
    returned_at = models.DateTimeField(null=True)
    value = models.FloatField(null=True)
    replaced_at = models.DateTimeField(auto_now_add=True)
