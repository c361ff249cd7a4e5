"""Drills in words. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

from labmon.drills.queries import DrillRow, StepRow
from labmon.screen.present import age_text, time_text

WHAT = {
    "sent": "false reading sent",
    "door": "door committed it",
    "reduce": "sample reduced",
    "judge": "alarm raised",
    "outbox": "message written",
    "channel": "message handed over",
    "person": "person took it",
}


@dataclass(frozen=True, slots=True)
class DrillView:
    """One drill in words."""

    id: int
    sentence: str
    is_failed: bool
    begun: str
    steps: list[tuple[str, str, str]]
    event_id: int | None


def drills_sentence(rows: Sequence[DrillRow], now: datetime) -> str:
    """How the calling chain stands."""
    over = [row for row in rows if row.ended_at is not None]
    if any(row.ended_at is None for row in rows):
        return "A drill is under way."
    if not over:
        return "The calling chain has never been tried."
    last = over[0]
    ago = age_text((now - last.ended_at).total_seconds())
    if last.failed_step:
        return f"The last drill failed at one step, {ago} ago: {WHAT[last.failed_step]} did not happen."
    return f"The calling chain worked from end to end {ago} ago."


def drill_view(row: DrillRow, now: datetime) -> DrillView:
    """A drill with its steps."""
    kind = "Weekly drill" if row.is_weekly else "Drill"
    if row.ended_at is None:
        said = f"{kind} of {row.person}: under way for {age_text((now - row.begun_at).total_seconds())}"
    elif row.failed_step:
        said = f"{kind} of {row.person}: failed at “{WHAT[row.failed_step]}”. {row.fault}"
    else:
        said = f"{kind} of {row.person}: reached them, and they took it"
    if row.whole_s is not None:
        said += f"; from the false reading to the message handed over {row.whole_s:.1f} s"
    steps = [(WHAT[step.name], time_text(step.at), _after(step)) for step in row.steps]
    return DrillView(row.id, said, bool(row.failed_step), time_text(row.begun_at), steps, row.event_id)


def _after(step: StepRow) -> str:
    if step.has_failed:
        return "it did not happen in time"
    return "" if step.after_s is None else f"{step.after_s:.1f} s after the one before"
