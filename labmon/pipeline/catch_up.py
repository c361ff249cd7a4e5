"""Everything that is due, now: for history written at once, for commands and tests. The beat does the same bit by bit."""

from ingest.times import now_us as server_now_us
from labmon.pipeline.derived import judge_derived
from labmon.pipeline.process import Processed, process_touched
from labmon.pipeline.rolling import compact_closed_days, roll_up_coarse_due, roll_up_due


def catch_up(now_us: int | None = None) -> Processed:
    """Judge and roll up until nothing is due."""
    clock_us = server_now_us() if now_us is None else now_us
    processed = process_touched(clock_us)
    roll_up_due(clock_us)
    roll_up_coarse_due()
    judge_derived(clock_us)
    while compact_closed_days(clock_us):
        pass
    return processed
