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


class RunLedger(models.Model):
    """One version of a run's ledger; never changed once it is made. ``body`` holds its intervals (labmon/runs/ledger_body.py).

    It is asked for (``asked_at``), taken up by a worker (``beat_at`` moves while it works), and made (``made_at``).
    """

    run = models.ForeignKey(Run, models.CASCADE, related_name="ledgers")
    number = models.PositiveIntegerField()
    asked_at = models.DateTimeField(auto_now_add=True)
    asked_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    reason = models.CharField(max_length=500, blank=True)
    edits = models.JSONField(default=dict, help_text="Spans declared unusable; levels used instead of those in force.")
    beat_at = models.DateTimeField(null=True)
    done_share = models.FloatField(default=0.0)
    fault = models.CharField(max_length=500, blank=True)
    made_at = models.DateTimeField(null=True)
    from_at = models.DateTimeField()
    until_at = models.DateTimeField()
    good_s = models.PositiveIntegerField(null=True)
    below_s = models.PositiveIntegerField(null=True)
    untrusted_s = models.PositiveIntegerField(null=True)
    no_reading_s = models.PositiveIntegerField(null=True)
    doubtful_s = models.PositiveIntegerField(null=True, help_text="Of the good ones.")
    longest_good_s = models.PositiveIntegerField(null=True)
    longest_good_from_s = models.PositiveIntegerField(null=True)
    facts = models.JSONField(default=dict, help_text="Figures, limits, calibrations and software as they were.")
    body = models.BinaryField(default=b"")

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["run", "number"], name="ledger_version_once"),
            models.CheckConstraint(
                condition=Q(made_at=None)
                | Q(
                    good_s__isnull=False,
                    below_s__isnull=False,
                    untrusted_s__isnull=False,
                    no_reading_s__isnull=False,
                    doubtful_s__lte=F("good_s"),
                ),
                name="ledger_made_has_its_totals",
            ),
        ]
        indexes = [models.Index(fields=["asked_at"], condition=Q(made_at=None, fault=""), name="ledger_waiting")]

    @property
    def length_s(self) -> int:
        """Whole seconds of the run that it accounts for."""
        return round((self.until_at - self.from_at).total_seconds())


class RunSoFar(models.Model):
    """What a run that lasts has come to up to ``through_at``; thrown away when its first ledger is made."""

    run = models.OneToOneField(Run, models.CASCADE, primary_key=True, related_name="so_far")
    through_at = models.DateTimeField()
    good_s = models.PositiveIntegerField(default=0)
    below_s = models.PositiveIntegerField(default=0)
    untrusted_s = models.PositiveIntegerField(default=0)
    no_reading_s = models.PositiveIntegerField(default=0)
    doubtful_s = models.PositiveIntegerField(default=0)
    body = models.BinaryField(default=b"")
