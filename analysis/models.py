"""What is derived from raw readings: all of it can be thrown away and made anew (except calibrations)."""

from django.contrib.postgres.fields import ArrayField
from django.db import models


class Calibration(models.Model):
    """A version of a tap's calibration, by valid time and entry time.

    It holds from ``valid_from`` until the next version's ``valid_from``; of two with the same ``valid_from`` the
    later entered one holds. Zeros, floors (1 sigma), saturation, monitor and nominal power are in the tap's raw unit
    (for dBm taps in W).
    """

    tap = models.ForeignKey("ingest.Tap", models.CASCADE, related_name="calibrations")
    valid_from = models.DateTimeField()
    entered_at = models.DateTimeField(auto_now_add=True)
    entered_by = models.CharField(max_length=150, blank=True, help_text="Who; the audit has the person.")
    zero1 = models.FloatField(default=0.0)
    zero2 = models.FloatField(default=0.0)
    zero1_error = models.FloatField(null=True, help_text="1 sigma of zero1.")
    zero2_error = models.FloatField(null=True, help_text="1 sigma of zero2.")
    zero_taken_at = models.DateTimeField(null=True)
    gain_ratio = models.FloatField(default=1.0, help_text="Gain of port 1 / gain of port 2.")
    floor1 = models.FloatField(default=0.0)
    floor2 = models.FloatField(default=0.0)
    saturation1 = models.FloatField(null=True)
    saturation2 = models.FloatField(null=True)
    leakage = models.JSONField(null=True, help_text="[[a, b], [c, d]]: readings = leakage @ (wanted of port 1, of port 2).")
    leakage_sigma = models.JSONField(null=True, help_text="1 sigma of each entry of leakage; empty: taken as exact.")
    wanted_port = models.PositiveSmallIntegerField(default=1)
    monitor_ratio = models.FloatField(null=True, help_text="Bright power / monitor power.")
    bright_nominal = models.FloatField(null=True)
    wanted_state = ArrayField(models.FloatField(), size=3, null=True, help_text="Unit (s1, s2, s3).")
    handedness = models.CharField(max_length=6, default="optics", choices=[("optics", "optics"), ("ieee", "ieee")])

    class Meta:
        indexes = [models.Index(fields=["tap", "valid_from", "entered_at"], name="calibration_by_time")]


class Doubt(models.Model):
    """A span of a tap that is doubtful until a person has spoken: new firmware, ports that look exchanged.

    ``until_us`` is empty while it lasts. With the answer *right* it casts no doubt any more, with *mended* it did until then.
    """

    class Answer(models.TextChoices):
        NONE = "", "not answered"
        RIGHT = "right", "all is right"
        MENDED = "mended", "mended"

    tap = models.ForeignKey("ingest.Tap", models.CASCADE, related_name="doubts")
    reason = models.CharField(max_length=20, help_text="Code of the reason (analysis.reduce.trust.Reason).")
    about = models.CharField(max_length=100, help_text="What it is about, once per tap and reason: a boot, a moment.")
    from_us = models.BigIntegerField()
    until_us = models.BigIntegerField(null=True)
    text = models.CharField(max_length=500, help_text="What was seen, in words.")
    noted_at = models.DateTimeField(auto_now_add=True)
    answer = models.CharField(max_length=6, choices=Answer, default=Answer.NONE, blank=True)
    answered_at = models.DateTimeField(null=True)
    answered_by = models.CharField(max_length=150, blank=True, help_text="Who; the audit has the person.")

    class Meta:
        constraints = [models.UniqueConstraint(fields=["tap", "reason", "about"], name="doubt_once")]


class TapNow(models.Model):
    """The newest reduced sample of a tap, as the pages and the API show it."""

    tap = models.OneToOneField("ingest.Tap", models.CASCADE, primary_key=True, related_name="now")
    at_us = models.BigIntegerField()
    sample = models.JSONField()
    trust_state = models.JSONField(default=dict, help_text="Where the tap's folds stand (analysis.record.tap_state).")
    open_until_us = models.BigIntegerField(
        null=True, help_text="Server time from which the tap's last second counts as complete."
    )

    class Meta:
        indexes = [
            models.Index(fields=["open_until_us"], condition=models.Q(open_until_us__isnull=False), name="tap_second_still_open")
        ]


class TapCheckpoint(models.Model):
    """Where a tap's own folds (frozen values, interval) stood at an earlier whole second: replay starts from here."""

    tap = models.ForeignKey("ingest.Tap", models.CASCADE, db_index=False, related_name="checkpoints")
    at_us = models.BigIntegerField()
    state = models.JSONField()

    class Meta:
        constraints = [models.UniqueConstraint(fields=["tap", "at_us"], name="tap_checkpoint_once")]


class RollupRow(models.Model):
    """One bucket of the open days: a mergeable cell as bytes (see analysis.rollup.cells)."""

    pk = models.CompositePrimaryKey("tap_id", "level_s", "bucket_us")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, db_index=False)
    level_s = models.IntegerField()
    bucket_us = models.BigIntegerField()
    body = models.BinaryField()


class RollupPage(models.Model):
    """Buckets of closed days of one tap and level, between multiples of the level's page length (analysis.record.rollup_pages).

    ``body`` is one compressed frame a column, ``ends`` says where each ends.
    """

    pk = models.CompositePrimaryKey("tap_id", "level_s", "page_us")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, db_index=False)
    level_s = models.IntegerField()
    page_us = models.BigIntegerField()
    layout = models.SmallIntegerField()
    count = models.IntegerField()
    ends = ArrayField(models.IntegerField())
    body = models.BinaryField()


class RollupDue(models.Model):
    """A span of a tap whose rollups must be made anew from ``level_s`` up."""

    tap = models.ForeignKey("ingest.Tap", models.CASCADE)
    level_s = models.IntegerField(default=10)
    first_at_us = models.BigIntegerField()
    last_at_us = models.BigIntegerField()


class DayStatistics(models.Model):
    """Statistics of one closed UTC day of a tap (analysis.record.statistics), so that months are read without raw readings."""

    pk = models.CompositePrimaryKey("tap_id", "day_us")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, db_index=False)
    day_us = models.BigIntegerField()
    made_at = models.DateTimeField(auto_now=True)
    readings = models.IntegerField()
    facts = models.JSONField()


class DayStatisticsDue(models.Model):
    """A closed day of a tap whose statistics must be made (anew); marks are only added, whoever works on them takes them off."""

    tap = models.ForeignKey("ingest.Tap", models.CASCADE)
    day_us = models.BigIntegerField()

    class Meta:
        indexes = [models.Index(fields=["day_us", "tap"], name="day_statistics_due")]
