"""Runs: a time that an experiment declares, for which its light must hold; its taps, and the limits that ruled in it."""

from django.conf import settings
from django.db import models
from django.db.models import F, Q

#: The database's own name of the rule that no two runs of one experiment overlap (migration 0007; SQL, see there).
ONE_RUN_AT_ONCE = "one_run_at_once_per_experiment"


class Run(models.Model):
    """A declared run: whole seconds from ``starts_at`` up to ``over_at``."""

    experiment = models.ForeignKey("labmon.Experiment", models.PROTECT, related_name="runs")
    name = models.CharField(max_length=200)
    owner = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="runs")
    deputy = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="runs_as_deputy")
    starts_at = models.DateTimeField()
    ends_at = models.DateTimeField(help_text="As planned; ended_at is earlier where the run was stopped.")
    taps = models.ManyToManyField("ingest.Tap", through="labmon.RunTap", related_name="runs")
    allowed_below_s = models.FloatField(default=0.0)
    wanted_trusted_share = models.FloatField(default=0.95)
    planned_at = models.DateTimeField(auto_now_add=True)
    planned_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    ended_at = models.DateTimeField(null=True, help_text="Stopped early: when.")
    ended_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    end_reason = models.CharField(max_length=500, blank=True)
    cancelled_at = models.DateTimeField(null=True)
    cancelled_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    cancel_reason = models.CharField(max_length=500, blank=True)
    limits_noted_at = models.DateTimeField(null=True, help_text="When the limits in force at the start were copied.")

    class Meta:
        constraints = [
            models.CheckConstraint(condition=Q(ends_at__gt=F("starts_at")), name="run_ends_after_it_starts"),
            models.CheckConstraint(
                condition=Q(ended_at=None) | Q(ended_at__gt=F("starts_at"), ended_at__lte=F("ends_at")),
                name="run_is_stopped_while_it_lasts",
            ),
            models.CheckConstraint(condition=Q(ended_at=None) | Q(cancelled_at=None), name="run_is_stopped_or_cancelled"),
            models.CheckConstraint(
                condition=Q(allowed_below_s__gte=0, wanted_trusted_share__gte=0, wanted_trusted_share__lte=1),
                name="run_wishes_can_be_met",
            ),
        ]
        indexes = [
            models.Index(fields=["experiment", "starts_at"], name="run_by_experiment"),
            models.Index(fields=["starts_at", "id"], name="run_by_start"),
        ]

    @property
    def over_at(self):
        """The end that holds: where it was stopped, else as planned."""
        return self.ended_at or self.ends_at


class RunTap(models.Model):
    """A tap that the run relies on."""

    run = models.ForeignKey(Run, models.CASCADE, related_name="run_taps")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, related_name="run_taps")

    class Meta:
        constraints = [models.UniqueConstraint(fields=["run", "tap"], name="run_tap_once")]


class RunLimit(models.Model):
    """A limit version that ruled in a run: from the start on, or from the moment in the run when it was set.

    It rules until the next row of the same limit. Copied at the start and at each change, never made later.
    """

    run = models.ForeignKey(Run, models.CASCADE, related_name="limits")
    limit_version = models.ForeignKey("labmon.LimitVersion", models.CASCADE, related_name="run_limits")
    from_at = models.DateTimeField()
    noted_at = models.DateTimeField(auto_now_add=True)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["run", "limit_version"], name="run_limit_once")]
