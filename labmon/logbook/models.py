"""What people write about a bench, and which of it changed the light's way."""

from django.conf import settings
from django.db import models
from django.db.models import F, Q


class LogTag(models.TextChoices):
    """What an entry is about."""

    NOTE = "note"
    TOUCHED = "touched"
    CLEANED = "cleaned"
    MEASURED = "measured"
    FAULT = "fault"
    REPAIR = "repair"


class ChangeKind(models.TextChoices):
    """What was changed of a bench; after it, history no longer speaks for the present."""

    FIBRE = "fibre", "fibre re-laid"
    JOINT = "joint", "connector or splice"
    LASER = "laser", "laser"
    OPTICS = "optics", "other optics"
    TAP = "tap", "tap or detector"
    GAIN = "gain", "gain or electronics"
    OTHER = "other", "something else"


class LogEntry(models.Model):
    """An entry about a moment (``until_at`` is null) or a span of a bench or one of its taps, and about a run if it names one."""

    station = models.ForeignKey("ingest.Station", models.CASCADE, related_name="log_entries")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, null=True, blank=True, related_name="+")
    run = models.ForeignKey("labmon.Run", models.SET_NULL, null=True, blank=True, related_name="log_entries")
    at = models.DateTimeField(help_text="When it happened.")
    until_at = models.DateTimeField(null=True, blank=True)
    text = models.CharField(max_length=4000, blank=True)
    tag = models.CharField(max_length=10, choices=LogTag, default=LogTag.NOTE)
    picture = models.FileField(upload_to="log", blank=True)
    was_change = models.BooleanField(null=True, help_text="Whether it was a configuration change; null: not answered yet.")
    by = models.ForeignKey(settings.AUTH_USER_MODEL, models.PROTECT, null=True, related_name="+")
    written_at = models.DateTimeField(auto_now_add=True)
    edited_at = models.DateTimeField(null=True, blank=True)
    struck_at = models.DateTimeField(null=True, blank=True, help_text="Struck out: kept, and shown as such.")

    class Meta:
        constraints = [
            models.CheckConstraint(condition=Q(until_at=None) | Q(until_at__gt=F("at")), name="log_entry_span_forward"),
        ]
        indexes = [models.Index(fields=["station", "-at"], name="log_entry_of_bench")]


class LogEntryBefore(models.Model):
    """How an entry read before an edit; written once, never changed."""

    entry = models.ForeignKey(LogEntry, models.CASCADE, related_name="befores")
    number = models.PositiveIntegerField()
    at = models.DateTimeField()
    until_at = models.DateTimeField(null=True, blank=True)
    text = models.CharField(max_length=4000, blank=True)
    tag = models.CharField(max_length=10, choices=LogTag)
    edited_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.PROTECT, null=True, related_name="+")
    edited_at = models.DateTimeField()

    class Meta:
        constraints = [models.UniqueConstraint(fields=["entry", "number"], name="log_entry_before_once")]


class ConfigurationChange(models.Model):
    """A bench, or one tap's way (``tap`` is set), is not what it was before ``at``; a clearance starts counting anew there."""

    station = models.ForeignKey("ingest.Station", models.CASCADE, related_name="configuration_changes")
    tap = models.ForeignKey("ingest.Tap", models.CASCADE, null=True, blank=True, related_name="+")
    at = models.DateTimeField()
    kind = models.CharField(max_length=10, choices=ChangeKind)
    text = models.CharField(max_length=4000, blank=True)
    by = models.ForeignKey(settings.AUTH_USER_MODEL, models.PROTECT, null=True, related_name="+")
    entry = models.OneToOneField(LogEntry, models.CASCADE, null=True, blank=True, related_name="change")
    written_at = models.DateTimeField(auto_now_add=True)
    withdrawn_at = models.DateTimeField(null=True, blank=True, help_text="Said by mistake: kept, and it cuts nothing.")

    class Meta:
        indexes = [models.Index(fields=["station", "-at"], name="change_of_bench")]
