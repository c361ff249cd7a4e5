"""The hint from the door to the workers: readings were stored, come and judge them.

Runs in the announcing process's background thread: it may block, it may fail; the sweep finds what it did not tell.
"""

import logging
import time
from typing import Final

from kombu.exceptions import OperationalError

log = logging.getLogger(__name__)

LEAST_APART_S: Final = 0.25
AFTER_FAILURE_S: Final = 2.0
EXPIRES_S: Final = 5.0


class Hint:
    """Asks for judging at most every `LEAST_APART_S`; leaves a broker that does not answer alone for a while."""

    def __init__(self) -> None:
        self._next_s = 0.0

    def __call__(self) -> None:
        """Called after readings were stored, from one thread only."""
        wait_s = self._next_s - time.monotonic()
        if wait_s > LEAST_APART_S:  # the broker failed a moment ago: the sweep does it
            return
        if wait_s > 0:
            time.sleep(wait_s)  # what is stored meanwhile is told by this same hint
        self._next_s = time.monotonic() + (LEAST_APART_S if self._is_sent() else AFTER_FAILURE_S)

    @staticmethod
    def _is_sent() -> bool:
        from labmon.pipeline.tasks import process_task

        try:
            process_task.apply_async(expires=EXPIRES_S, retry=False)
        except (OperationalError, OSError) as fault:
            log.warning("hint_failed", extra={"fault": str(fault)})
            return False
        return True


ask_for_judging = Hint()
