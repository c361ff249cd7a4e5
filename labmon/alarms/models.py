"""Alarms: one row an episode; and holds, which keep alarms quiet for a time."""

from datetime import timedelta
from typing import Final

from django.conf import settings
from django.db import models
from django.db.models import F, Q

#: No shelf is longer: who is still at the bench then shelves anew, and nothing is forgotten over night.
LONGEST_SHELF: Final = timedelta(hours=4)


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


class HoldKind(models.TextChoices):
    SHELVED = "shelved"
    OUT_OF_SERVICE = "out-of-service"


#: `labmon.alarms.states.state_of`, said once more to the database: no writer can store a state its facts do not give.
_OPEN, _RETURNED = Q(is_withdrawn=False, returned_at=None), Q(is_withdrawn=False, returned_at__isnull=False)
_IN_SERVICE = Q(is_out_of_service=False)
_CALLING = _IN_SERVICE & Q(is_suppressed=False)
_LOUD = _CALLING & Q(shelved_until=None)
_NEEDS_NOBODY = (
    Q(acknowledged_at__isnull=False)
    | Q(is_late=True)
    | Q(is_out_of_service=True)
    | Q(is_suppressed=True)
    | Q(shelved_until__isnull=False)
)
_STATE_FOLLOWS = (
    Q(is_withdrawn=True, state="normal")
    | _OPEN & Q(is_out_of_service=True, state="out-of-service")
    | _OPEN & _IN_SERVICE & Q(is_suppressed=True, state="suppressed")
    | _OPEN & _CALLING & Q(shelved_until__isnull=False, state="shelved")
    | _OPEN & _LOUD & Q(acknowledged_at__isnull=False, state="acknowledged")
    | _OPEN & _LOUD & Q(acknowledged_at=None, state="unacknowledged")
    | _RETURNED & _NEEDS_NOBODY & Q(state="normal")
    | _RETURNED & _LOUD & Q(acknowledged_at=None, is_late=False, state="returned-unacknowledged")
)


class Alarm(models.Model):
    """An episode that someone should know of. Times of limit alarms are data times, the rest server times."""

    kind = models.CharField(max_length=10, choices=AlarmKind)
    experiment = models.ForeignKey("labmon.Experiment", models.CASCADE, null=True, related_name="alarms")
    limit = models.ForeignKey("labmon.Limit", models.CASCADE, null=True, related_name="alarms")
    version = models.ForeignKey("labmon.LimitVersion", models.CASCADE, null=True, related_name="alarms")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, related_name="alarms")
    quantity = models.CharField(max_length=20, blank=True)
    level = models.CharField(max_length=7, choices=AlarmLevel, default=AlarmLevel.ALARM)
    state = models.CharField(max_length=24, choices=AlarmState, default=AlarmState.UNACKNOWLEDGED)
    event = models.ForeignKey("labmon.Event", models.SET_NULL, null=True, related_name="alarms")
    began_at = models.DateTimeField(null=True, help_text="First beyond the limit, last heard, first untrusted: the earliest.")
    began_until = models.DateTimeField(null=True, help_text="And the latest; empty: the same moment.")
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
    is_suppressed = models.BooleanField(default=False, help_text="By design: outside a declared run.")
    shelved_until = models.DateTimeField(null=True, help_text="Of the hold that kept it when it was last written open.")
    is_out_of_service = models.BooleanField(default=False)
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
            models.CheckConstraint(condition=_STATE_FOLLOWS, name="alarm_state_follows_from_its_facts"),
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


class AlarmHold(models.Model):
    """Alarms of a tap kept quiet: by whom, why, until when. Readings are judged all the same.

    ``alarm_kind`` empty: all of the tap's; ``limit``: those of one limit; else those of that kind.
    """

    kind = models.CharField(max_length=14, choices=HoldKind)
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, related_name="holds")
    alarm_kind = models.CharField(max_length=10, choices=AlarmKind, blank=True)
    limit = models.ForeignKey("labmon.Limit", models.CASCADE, null=True, related_name="holds")
    by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    reason = models.CharField(max_length=500)
    begun_at = models.DateTimeField()
    until = models.DateTimeField(null=True, help_text="Ends by itself then; empty (out of service only): when someone ends it.")
    ended_at = models.DateTimeField(null=True)
    ended_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")

    class Meta:
        constraints = [
            models.CheckConstraint(
                condition=Q(kind="out-of-service") | Q(until__isnull=False, until__lte=F("begun_at") + LONGEST_SHELF),
                name="shelf_ends_within_4_h",
            ),
            models.CheckConstraint(condition=Q(until=None) | Q(until__gt=F("begun_at")), name="hold_ends_after_it_begins"),
            models.CheckConstraint(condition=Q(ended_at=None) | Q(ended_at__gte=F("begun_at")), name="hold_ended_after_it_began"),
            models.CheckConstraint(condition=~Q(reason=""), name="hold_has_a_reason"),
            models.CheckConstraint(
                condition=Q(alarm_kind="limit", limit__isnull=False) | ~Q(alarm_kind="limit") & Q(limit=None),
                name="hold_names_its_limit",
            ),
            models.UniqueConstraint(
                fields=["kind", "tap", "alarm_kind", "limit"],
                condition=Q(ended_at=None),
                nulls_distinct=False,
                name="one_standing_hold",
            ),
        ]
        indexes = [models.Index(fields=["until"], condition=Q(ended_at=None), name="hold_standing")]
