"""Drills as their page shows them."""

from dataclasses import dataclass
from datetime import datetime

from labmon.drills.follow import STEPS
from labmon.drills.models import Drill


@dataclass(frozen=True, slots=True)
class StepRow:
    """One step: when it happened, how long after the one before, or that it failed."""

    name: str
    at: datetime | None
    after_s: float | None
    has_failed: bool


@dataclass(frozen=True, slots=True)
class DrillRow:
    """One drill with its steps."""

    id: int
    person: str
    is_weekly: bool
    begun_at: datetime
    ended_at: datetime | None
    failed_step: str
    fault: str
    event_id: int | None
    steps: list[StepRow]

    @property
    def whole_s(self) -> float | None:
        """From the false reading to the first channel, s; None where it did not get there."""
        times = {step.name: step.at for step in self.steps}
        sent, handed = times["sent"], times["channel"]
        return (handed - sent).total_seconds() if sent and handed else None


def drill_rows(count: int = 50) -> list[DrillRow]:
    """Drills, newest first; one query."""
    return [_row(drill) for drill in Drill.objects.select_related("alarm").order_by("-pk")[:count]]


def _row(drill: Drill) -> DrillRow:
    steps, before = [], drill.begun_at
    for name, field in (("sent", "sent_at"), *((step, field) for step, field, _ in STEPS)):
        at = getattr(drill, field)
        after_s = max((at - before).total_seconds(), 0.0) if at else None
        steps.append(StepRow(name, at, after_s, drill.failed_step == name))
        before = at or before
    event_id = drill.alarm.event_id if drill.alarm else None
    return DrillRow(
        drill.pk, drill.person_name, drill.week is not None, drill.begun_at, drill.ended_at, drill.failed_step, drill.fault,
        event_id, steps,
    )
