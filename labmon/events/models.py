"""Events: alarms that start together on benches that share something; and who is on call."""

from django.conf import settings
from django.contrib.postgres.constraints import ExclusionConstraint
from django.contrib.postgres.fields import RangeOperators
from django.db import models
from django.db.models import F, Func, Q


class EventKind(models.TextChoices):
    """Silence has other causes than light has: the two never make one event."""

    LIGHT = "light"
    SILENCE = "silence"


class Event(models.Model):
    """What one call is about: one alarm, or several that start together and share a bench, room, laser, logger or network.

    ``things`` are [kind, name] pairs that all its alarms share; while it grows they only get fewer.
    """

    kind = models.CharField(max_length=7, choices=EventKind)
    level = models.CharField(max_length=7, default="warning")
    things = models.JSONField(default=list)
    began_at = models.DateTimeField(help_text="When its first alarm began: the earliest it can have been.")
    began_until = models.DateTimeField(help_text="And the latest.")
    opened_at = models.DateTimeField(auto_now_add=True)
    due_at = models.DateTimeField(null=True, help_text="When the calls that are due are written.")
    step = models.PositiveSmallIntegerField(default=0, help_text="How often it was passed on.")
    next_step_at = models.DateTimeField(null=True, help_text="When it is passed on, should nobody have taken it.")
    taken_at = models.DateTimeField(null=True)
    taken_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    is_drill = models.BooleanField(default=False)

    class Meta:
        constraints = [
            models.CheckConstraint(condition=Q(began_until__gte=F("began_at")), name="event_begins_forward"),
            models.CheckConstraint(condition=Q(taken_by=None) | Q(taken_at__isnull=False), name="event_taken_at_a_time"),
        ]
        indexes = [
            models.Index(fields=["began_at"], name="event_by_beginning"),
            models.Index(fields=["due_at"], condition=Q(due_at__isnull=False), name="event_due"),
            models.Index(fields=["next_step_at"], condition=Q(next_step_at__isnull=False), name="event_next_step"),
        ]


class OnCall(models.Model):
    """A time in which someone is on call; two never overlap, so that it is always clear who."""

    person = models.ForeignKey(settings.AUTH_USER_MODEL, models.CASCADE, related_name="on_call")
    from_at = models.DateTimeField()
    until_at = models.DateTimeField()
    made_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    made_at = models.DateTimeField(auto_now_add=True)

    class Meta:
        constraints = [
            models.CheckConstraint(condition=Q(until_at__gt=F("from_at")), name="on_call_ends_after_it_begins"),
            ExclusionConstraint(
                name="one_on_call_at_a_time",
                expressions=[(Func(F("from_at"), F("until_at"), function="tstzrange"), RangeOperators.OVERLAPS)],
            ),
        ]


class CallRules(models.Model):
    """The lab's own rules of calling; one row."""

    remind_after_s = models.FloatField(default=900.0, help_text="Not taken for so long: reminded, and passed on.")
    drill_weekday = models.PositiveSmallIntegerField(null=True, help_text="0 is Monday; empty: no weekly drill.")
    drill_hour = models.PositiveSmallIntegerField(default=10, help_text="UTC.")

    class Meta:
        constraints = [
            models.CheckConstraint(condition=Q(pk=1), name="one_row_of_call_rules"),
            models.CheckConstraint(condition=Q(remind_after_s__gte=60.0), name="reminded_after_a_minute_at_least"),
            models.CheckConstraint(condition=Q(drill_hour__lt=24), name="drill_hour_of_a_day"),
            models.CheckConstraint(condition=Q(drill_weekday=None) | Q(drill_weekday__lt=7), name="drill_weekday_of_a_week"),
        ]
