"""Makes the packages that are asked for. A worker that dies leaves one that is not made; after a while another takes it up."""

import logging
import time
from datetime import timedelta
from typing import Final

from django.db import OperationalError, transaction
from django.db.models import F, Q
from django.utils import timezone

from labmon.evidence.files import digest_of, new_file, place_of
from labmon.evidence.models import RunEvidence
from labmon.evidence.package import NotAsMade, Order, write_evidence
from labmon.live.publish import publish

log = logging.getLogger(__name__)

LEFT_AFTER: Final = timedelta(minutes=5)
TELL_EVERY_S: Final = 0.5


def make_waiting_evidence(*, for_s: float = float("inf")) -> list[int]:
    """Make what is asked for, oldest first, beginning none after ``for_s`` seconds; returns the ids of those made."""
    began, made = time.monotonic(), []
    while time.monotonic() - began < for_s and (evidence := _take_one()) is not None:
        make_evidence(evidence)
        made.append(evidence.pk)
    return made


@transaction.atomic
def _take_one() -> RunEvidence | None:
    """The oldest package that nobody works on, now taken."""
    now = timezone.now()
    free = Q(beat_at=None) | Q(beat_at__lt=now - LEFT_AFTER)
    waiting = RunEvidence.objects.filter(free, made_at=None, fault="").order_by("asked_at", "pk")
    evidence = waiting.select_for_update(skip_locked=True, of=("self",)).select_related("ledger", "run__experiment").first()
    if evidence is not None:
        evidence.beat_at, evidence.rows_done = now, 0
        evidence.save(update_fields=["beat_at", "rows_done"])
        evidence.ledger.run = evidence.run
    return evidence


def make_evidence(evidence: RunEvidence) -> None:
    """Write the package and keep its digest; a fault is kept in words."""
    began, now = time.monotonic(), timezone.now()
    try:
        path = place_of(evidence)
        with new_file(path) as file:
            write_evidence(file, Order(evidence.ledger, evidence.number, now), _Teller(evidence))
        RunEvidence.objects.filter(pk=evidence.pk, made_at=None).update(
            made_at=timezone.now(), size=path.stat().st_size, sha256=digest_of(path), rows_done=F("rows_total"))
    except OperationalError:  # the database was away: another worker takes it up
        raise
    except NotAsMade as fault:
        _keep_fault(evidence, str(fault))
    except Exception as fault:
        _keep_fault(evidence, f"{type(fault).__name__}: {fault}")
        raise
    _publish(evidence)
    took_s = round(time.monotonic() - began, 3)
    log.info("evidence_made", extra={"run_id": evidence.run_id, "evidence": evidence.number, "took_s": took_s})


def _keep_fault(evidence: RunEvidence, fault: str) -> None:
    RunEvidence.objects.filter(pk=evidence.pk, made_at=None).update(fault=fault[:500])
    _publish(evidence)


def _publish(evidence: RunEvidence) -> None:
    with transaction.atomic():
        publish({"kind": "runs", "ids": [evidence.run_id], "experiments": [evidence.run.experiment_id]})


class _Teller:
    """Writes how far the making is, twice a second at most."""

    def __init__(self, evidence: RunEvidence) -> None:
        self._evidence, self._done, self._next_s = evidence, 0, time.monotonic() + TELL_EVERY_S

    def __call__(self, count: int) -> None:
        self._done += count
        if time.monotonic() >= self._next_s:
            self._next_s = time.monotonic() + TELL_EVERY_S
            RunEvidence.objects.filter(pk=self._evidence.pk, made_at=None).update(rows_done=self._done, beat_at=timezone.now())
            _publish(self._evidence)
