"""Experiments, the taps they watch, and their limits with history."""

from django.conf import settings
from django.db import models

from analysis.judge.rule import Quantity


class Experiment(models.Model):
    """Something that needs its light polarized: it watches taps and says what is good enough."""

    name = models.CharField(max_length=200, unique=True)
    owner = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="experiments")
    taps = models.ManyToManyField("ingest.Tap", related_name="experiments")
    no_reading_after_s = models.FloatField(null=True, blank=True, help_text="Call after this silence; empty: 60 s.")
    untrusted_after_s = models.FloatField(default=60.0)
    created_at = models.DateTimeField(auto_now_add=True)


class Limit(models.Model):
    """A limit on one quantity of one tap of one experiment; its values are in its versions."""

    experiment = models.ForeignKey(Experiment, models.CASCADE, related_name="limits")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, related_name="limits")
    quantity = models.CharField(max_length=20, choices=[(q.value, q.value) for q in Quantity])

    class Meta:
        constraints = [models.UniqueConstraint(fields=["experiment", "tap", "quantity"], name="limit_once")]


class LimitVersion(models.Model):
    """What a limit said from ``valid_from`` until the next version; ``is_retired`` ends it."""

    limit = models.ForeignKey(Limit, models.CASCADE, related_name="versions")
    number = models.PositiveIntegerField()
    valid_from = models.DateTimeField()
    alarm = models.FloatField()
    warning = models.FloatField(null=True, blank=True)
    on_delay_s = models.FloatField(default=60.0)
    off_delay_s = models.FloatField(default=60.0)
    deadband = models.FloatField(default=1.0)
    window_s = models.FloatField(null=True, blank=True, help_text="Over which a share or a drift is taken; else empty.")
    in_runs_only = models.BooleanField(default=False)
    is_retired = models.BooleanField(default=False)
    set_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    reason = models.CharField(max_length=500, blank=True)
    consented_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+",
                                     help_text="The second person, where a run was declared and the limit was loosened.")

    class Meta:
        constraints = [models.UniqueConstraint(fields=["limit", "number"], name="limit_version_once")]


class LimitFloor(models.Model):
    """The least that limits on a quantity of a bench (or of one tap) must ask for; the newest row rules.

    ``value`` empty: lifted. For the angle and other quantities that are bad above, it is the most.
    """

    station = models.ForeignKey("ingest.Station", models.CASCADE, related_name="floors")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, null=True, related_name="floors")
    quantity = models.CharField(max_length=20, choices=[(q.value, q.value) for q in Quantity])
    value = models.FloatField(null=True)
    set_at = models.DateTimeField(auto_now_add=True)
    set_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    reason = models.CharField(max_length=500)

    class Meta:
        indexes = [models.Index(fields=["station", "quantity", "-set_at"], name="floor_newest")]


class RequestState(models.TextChoices):
    WAITING = "waiting"
    GRANTED = "granted"
    REFUSED = "refused"
    WITHDRAWN = "withdrawn"
    EXPIRED = "expired"


class LimitRequest(models.Model):
    """A limit that someone wants loosened during a declared run: a second person decides, or time does."""

    experiment = models.ForeignKey(Experiment, models.CASCADE, related_name="limit_requests")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, related_name="+")
    quantity = models.CharField(max_length=20, choices=[(q.value, q.value) for q in Quantity])
    wish = models.JSONField(help_text="As set_limit takes it; null: retire.", null=True)
    version = models.ForeignKey(LimitVersion, models.CASCADE, related_name="+", help_text="What was in force when asked.")
    loosens = models.JSONField(help_text="What it would loosen, in words.")
    asked_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.CASCADE, related_name="+")
    asked_at = models.DateTimeField()
    reason = models.CharField(max_length=500)
    expires_at = models.DateTimeField()
    state = models.CharField(max_length=9, choices=RequestState, default=RequestState.WAITING)
    decided_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    decided_at = models.DateTimeField(null=True)
    note = models.CharField(max_length=500, blank=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["experiment", "tap", "quantity"], condition=models.Q(state="waiting"),
                                    name="one_waiting_request_per_limit"),
            models.CheckConstraint(condition=models.Q(expires_at__gt=models.F("asked_at")), name="request_ends_after_it_begins"),
            models.CheckConstraint(condition=~models.Q(state="granted") | ~models.Q(decided_by=models.F("asked_by")),
                                   name="nobody_grants_their_own_request"),
        ]


class FoldCheckpoint(models.Model):
    """Where the alarm fold of a limit version stood at a whole second; the newest is where live judging goes on."""

    version = models.ForeignKey(LimitVersion, models.CASCADE, related_name="checkpoints")
    at_us = models.BigIntegerField()
    state = models.JSONField()
    is_newest = models.BooleanField(default=False)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["version", "at_us", "is_newest"], name="checkpoint_once"),
            models.UniqueConstraint(fields=["version"], condition=models.Q(is_newest=True), name="one_newest_checkpoint"),
        ]
