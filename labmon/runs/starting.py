"""What happens when a run starts: its limits are copied, its suppressed alarms are heard, the pages are told. The beat's."""

import logging
from datetime import datetime

from django.db import transaction
from django.utils import timezone

from labmon.alarms.waking import wake_alarms
from labmon.claims import JUDGING, claim_taps
from labmon.live.publish import publish
from labmon.runs.limits import note_start_limits
from labmon.runs.models import Run

log = logging.getLogger(__name__)


def start_due_runs(now: datetime | None = None) -> list[int]:
    """Start the runs whose time has come; safe to run twice and side by side. Returns the ids of those it started."""
    clock = now or timezone.now()
    due = Run.objects.filter(limits_noted_at=None, cancelled_at=None, starts_at__lte=clock).order_by("starts_at", "pk")
    return [run_id for run_id in due.values_list("pk", flat=True) if _start_if_due(run_id, clock)]


@transaction.atomic
def _start_if_due(run_id: int, now: datetime) -> bool:
    """False where a worker has one of the taps, or somebody else was first: the next beat looks again."""
    run = Run.objects.select_for_update(of=("self",), skip_locked=True).filter(pk=run_id, limits_noted_at=None).first()
    if run is None or run.cancelled_at or run.starts_at > now:
        return False
    tap_ids = list(run.run_taps.values_list("tap_id", flat=True))
    if len(claim_taps(JUDGING, tap_ids, len(tap_ids))) < len(tap_ids):
        return False
    note_start_limits(run, now)
    if run.over_at > now:
        wake_alarms(run.pk, run.experiment_id, tap_ids)
    publish({"kind": "runs", "ids": [run.pk], "experiments": [run.experiment_id]})
    log.info("run_started", extra={"run_id": run.pk, "experiment_id": run.experiment_id})
    return True
