"""What is said of the time to a limit, and what has to be judged anew from one-minute cells."""

from django.db import models


class AheadDue(models.Model):
    """One-minute cells of a tap that were made (anew) since what rests on them was judged; one row a tap, both ends included."""

    tap = models.OneToOneField("ingest.Tap", models.CASCADE, primary_key=True, related_name="+")
    first_us = models.BigIntegerField()
    last_us = models.BigIntegerField()


class LimitOutlook(models.Model):
    """The newest outlook of a limit on ER or angle: when recent drift will have brought the light to its alarm level."""

    limit = models.OneToOneField("labmon.Limit", models.CASCADE, primary_key=True, related_name="outlook")
    at_us = models.BigIntegerField(help_text="End of the drift that it rests on.")
    window_s = models.FloatField()
    said = models.CharField(max_length=12)
    angle_deg = models.FloatField(null=True)
    limit_deg = models.FloatField()
    median_s = models.FloatField(null=True, help_text="Half of the futures are there; empty: later than the window.")
    tenth_s = models.FloatField(null=True, help_text="One in ten has.")
    turns_back = models.BooleanField(default=False)


class AheadScore(models.Model):
    """How warnings ahead of a limit would have done on the stored past, walked forward."""

    limit = models.OneToOneField("labmon.Limit", models.CASCADE, primary_key=True, related_name="ahead_score")
    made_at = models.DateTimeField()
    from_us = models.BigIntegerField()
    until_us = models.BigIntegerField()
    basis = models.JSONField(help_text="Levels, delays and window that it was made with.")
    warnings = models.PositiveIntegerField(help_text="Warnings whose outcome is known.")
    came_true = models.PositiveIntegerField()
    open_ended = models.PositiveIntegerField(help_text="Warnings of unknown outcome.")
    passings = models.PositiveIntegerField(help_text="Times that the level was passed.")
    warned_of = models.PositiveIntegerField()
    median_lead_s = models.FloatField(null=True)
