"""Celery's doors to the making of packages; both may run twice and side by side."""

import logging

from celery import shared_task
from django.db import OperationalError as DatabaseAway
from django.db import transaction
from kombu.exceptions import OperationalError

from labmon.evidence.making import make_waiting_evidence

log = logging.getLogger(__name__)


def ask_worker() -> None:
    """Hint to a worker after commit; without a broker the beat finds what waits."""
    def ask() -> None:
        try:
            make_evidence_task.delay()
        except OperationalError as fault:  # kombu's: the broker is away
            log.warning("evidence_hint_failed", extra={"fault": str(fault)})

    transaction.on_commit(ask, robust=True)


@shared_task(name="labmon.evidence.make", acks_late=True, ignore_result=True, time_limit=1800,
             autoretry_for=(DatabaseAway,), retry_backoff=5, max_retries=5)
def make_evidence_task() -> None:
    """Make the packages that wait."""
    make_waiting_evidence(for_s=60.0)
