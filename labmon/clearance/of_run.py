"""The clearance of a declared run: its start, length, allowed seconds and limits."""

from datetime import datetime

from ingest.times import us_of
from labmon.clearance.ask import Answer, checked_question, clearance_of
from labmon.clearance.limits import AskedLimit, asked_limits
from labmon.runs.limits import ruling_limits
from labmon.runs.models import Run


def run_clearance(run: Run, now: datetime) -> Answer:
    """What is said of a run now, or (once it has begun) what would have been said at its start, by the limits that ruled then."""
    length_s = (run.ends_at - run.starts_at).total_seconds()
    allowed_s = min(run.allowed_below_s, max(length_s - 1.0, 0.0))
    question = checked_question(us_of(run.starts_at), length_s, allowed_s, us_of(now))
    return clearance_of(run.experiment, question, run_limits(run))


def run_limits(run: Run) -> list[AskedLimit]:
    """The limits that rule at the run's start."""
    return asked_limits(ruling.version for ruling in ruling_limits(run) if ruling.from_at <= run.starts_at)
