"""Standing holds, and what they make of an alarm."""

from collections.abc import Iterable
from dataclasses import dataclass, field

from django.db.models import QuerySet

from labmon.alarms.models import Alarm, AlarmHold, HoldKind


@dataclass(frozen=True, slots=True)
class StandingHolds:
    """Holds of some taps that nobody and nothing has ended yet; one whose time is over stands until the beat ends it."""

    by_tap: dict[int, list[AlarmHold]] = field(default_factory=dict)

    @classmethod
    def of(cls, tap_ids: Iterable[int]) -> "StandingHolds":
        """One query; none without taps."""
        found: dict[int, list[AlarmHold]] = {}
        asked = list(tap_ids)
        for hold in standing_holds().filter(tap_id__in=asked) if asked else []:
            found.setdefault(hold.tap_id, []).append(hold)
        return cls(found)

    def mark(self, alarm: Alarm) -> None:
        """Write into an open alarm what keeps it quiet now; what has returned keeps what it had."""
        if alarm.returned_at is not None and alarm.pk is not None:
            return
        holding = [hold for hold in self.by_tap.get(alarm.tap_id, []) if holds(hold, alarm)]
        alarm.is_out_of_service = any(hold.kind == HoldKind.OUT_OF_SERVICE for hold in holding)
        ends = [hold.until for hold in holding if hold.kind == HoldKind.SHELVED]
        alarm.shelved_until = max(ends) if ends else None


def standing_holds() -> QuerySet[AlarmHold]:
    """All that have not ended."""
    return AlarmHold.objects.filter(ended_at=None)


def holds(hold: AlarmHold, alarm: Alarm) -> bool:
    """True if the hold is about this alarm."""
    if hold.tap_id != alarm.tap_id or hold.alarm_kind not in ("", alarm.kind):
        return False
    return hold.limit_id is None or hold.limit_id == alarm.limit_id
