"""What clearances leave behind: back-tests of the rule, and how the word for a planned run went as its start neared."""

from django.conf import settings
from django.db import models

from analysis.outlook.verdict import Verdict

VERDICTS = [(verdict.value, verdict.value) for verdict in Verdict]


class BackTestPass(models.Model):
    """One walk over all stored nights of the lab; ``facts`` is the sum of all its limits once it has ended."""

    night = models.DateField(null=True, unique=True, help_text="Of the nightly one: two beats make one.")
    asked_at = models.DateTimeField(auto_now_add=True)
    asked_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    total = models.PositiveIntegerField(default=0)
    ended_at = models.DateTimeField(null=True)
    facts = models.JSONField(null=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(models.Value(1), condition=models.Q(ended_at=None), name="one_back_test_at_a_time"),
        ]


class BackTestDue(models.Model):
    """A limit that a pass has still to walk; whoever has done it takes it off."""

    of = models.ForeignKey(BackTestPass, models.CASCADE, related_name="due")
    limit = models.ForeignKey("labmon.Limit", models.CASCADE, related_name="+")

    class Meta:
        constraints = [models.UniqueConstraint(fields=["of", "limit"], name="back_test_due_once")]


class LimitBackTest(models.Model):
    """The newest back-test of one limit: what would have been said before each of its nights, and what came out."""

    limit = models.OneToOneField("labmon.Limit", models.CASCADE, primary_key=True, related_name="back_test")
    made_at = models.DateTimeField()
    took_s = models.FloatField()
    alarm = models.FloatField(help_text="The level that was in force.")
    nights = models.JSONField(help_text="One list a night (labmon.clearance.told).")
    facts = models.JSONField()


class RunWatch(models.Model):
    """How a planned run's clearance stands; it is looked at more often as the start nears.

    ``standing`` is the word that the owner knows: it falls at once, and rises only when a better one was seen twice in a row.
    """

    run = models.OneToOneField("labmon.Run", models.CASCADE, primary_key=True, related_name="clearance_watch")
    looked_at = models.DateTimeField()
    standing = models.CharField(max_length=20, choices=VERDICTS)
    better = models.CharField(max_length=20, blank=True, help_text="A better word that the last look found.")
    falls = models.PositiveIntegerField(default=0)


class RunClearance(models.Model):
    """What was said of a run before its start, each time that something in it changed."""

    run = models.ForeignKey("labmon.Run", models.CASCADE, related_name="clearances")
    made_at = models.DateTimeField()
    verdict = models.CharField(max_length=20, choices=VERDICTS)
    held = models.PositiveIntegerField()
    count = models.PositiveIntegerField()
    failure_bound = models.FloatField()
    sentence = models.CharField(max_length=500)
    reasons = models.JSONField(default=list)
    is_fall = models.BooleanField(default=False, help_text="The owner was called.")

    class Meta:
        indexes = [models.Index(fields=["run", "-made_at"], name="run_clearance_newest")]
