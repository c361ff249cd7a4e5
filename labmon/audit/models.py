"""What people changed: append-only (the database refuses update and delete)."""

from django.conf import settings
from django.db import models


class AuditEntry(models.Model):
    """One write by a person."""

    at = models.DateTimeField(auto_now_add=True)
    person = models.ForeignKey(settings.AUTH_USER_MODEL, models.PROTECT, null=True, related_name="+")
    person_name = models.CharField(max_length=150)
    action = models.CharField(max_length=60)
    subject = models.CharField(max_length=200)
    before = models.JSONField(null=True)
    after = models.JSONField(null=True)
    reason = models.CharField(max_length=500, blank=True)

    class Meta:
        indexes = [
            models.Index(fields=["subject", "-at"], name="audit_by_subject"),
            models.Index(fields=["action", "-id"], name="audit_by_action"),
            models.Index(fields=["person_name", "-id"], name="audit_by_person"),
            models.Index(fields=["at"], name="audit_by_time"),
        ]


class AuditPlace(models.Model):
    """That an entry is about a bench (``station/b08``) or an experiment (``experiment/3``); append-only as well."""

    entry = models.ForeignKey(AuditEntry, models.CASCADE, related_name="places", db_index=False)
    place = models.CharField(max_length=90)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["place", "entry"], name="audit_place_once")]
