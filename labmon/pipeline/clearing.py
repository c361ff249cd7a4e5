"""Celery's doors of clearances: each calls one function, and may run twice and side by side."""

import logging

from celery import shared_task
from django.db import OperationalError, transaction
from kombu.exceptions import OperationalError as BrokerAway

from labmon.clearance.back_tests import begin_nightly, walk_due
from labmon.clearance.watch import look_at_runs

log = logging.getLogger(__name__)

#: A task ends after this and leaves the rest to the next.
WALK_FOR_S = 25.0


def _task(name: str, time_limit: int):  # type: ignore[no-untyped-def]
    return shared_task(name=f"labmon.pipeline.{name}", acks_late=True, ignore_result=True, time_limit=time_limit,
                       autoretry_for=(OperationalError,), retry_backoff=1, max_retries=3)


@_task("begin_back_test", 60)
def begin_back_test_task() -> None:
    """Begin the night's back-test."""
    begin_nightly()


@_task("walk_back_tests", 120)
def walk_back_tests_task() -> None:
    """Walk limits whose back-test is due, some at a time."""
    walk_due(for_s=WALK_FOR_S)


@_task("look_at_runs", 120)
def look_at_runs_task() -> None:
    """Clear runs that start soon anew; call owners whose word has fallen."""
    look_at_runs(for_s=WALK_FOR_S)


def hint_back_test() -> None:
    """Ask a worker to begin at once, after the commit; without a broker the beat finds what is due."""

    def ask() -> None:
        try:
            walk_back_tests_task.apply_async(expires=60.0, retry=False)
        except (BrokerAway, OSError) as fault:
            log.warning("back_test_hint_failed", extra={"fault": str(fault)})

    transaction.on_commit(ask, robust=True)
