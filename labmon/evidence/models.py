"""Evidence packages: asked for, made by a worker, kept to be fetched."""

from django.conf import settings
from django.db import models


class RunEvidence(models.Model):
    """A package of one version of a run's ledger; never changed once it is made. Its file lies below the data folder.

    It is asked for (``asked_at``), taken up by a worker (``beat_at`` moves while it works), and made (``made_at``).
    """

    ledger = models.ForeignKey("labmon.RunLedger", models.CASCADE, related_name="evidence")
    run = models.ForeignKey("labmon.Run", models.CASCADE, related_name="evidence")
    number = models.PositiveIntegerField(help_text="Within the run.")
    asked_at = models.DateTimeField(auto_now_add=True)
    asked_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    beat_at = models.DateTimeField(null=True)
    rows_total = models.BigIntegerField(default=0)
    rows_done = models.BigIntegerField(default=0)
    fault = models.CharField(max_length=500, blank=True)
    made_at = models.DateTimeField(null=True)
    size = models.BigIntegerField(null=True, help_text="Bytes.")
    sha256 = models.CharField(max_length=64, blank=True, db_index=True)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["run", "number"], name="evidence_number_once")]
        indexes = [models.Index(fields=["asked_at"], condition=models.Q(made_at=None, fault=""), name="evidence_waiting")]
