"""Alarms in words. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

from labmon.alarms.queries import AlarmRow
from labmon.screen.level_words import both_units
from labmon.screen.present import age_text, count_text, time_text

STATE_WORDS = {
    "unacknowledged": "unacknowledged",
    "acknowledged": "acknowledged",
    "returned-unacknowledged": "returned, unacknowledged",
    "normal": "normal",
    "shelved": "shelved",
    "suppressed": "suppressed",
    "out-of-service": "out of service",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class AlarmView:
    """One alarm in words."""

    id: int
    tap: str
    station: str
    experiment: str
    experiment_id: int | None
    title: str
    state: str
    shape: str
    level: str
    raised: str
    since: str
    raised_ms: int
    lasted: str
    acknowledged: str
    note: str
    is_open: bool
    is_waiting: bool
    is_late: bool
    is_withdrawn: bool
    earlier: list[str]
    event_id: int | None = None
    is_drill: bool = False


def alarm_view(row: AlarmRow, now: datetime) -> AlarmView:
    """An alarm row in words."""
    is_open = row.returned_at is None and not row.is_withdrawn
    until = row.returned_at or now
    acknowledged = ""
    if row.acknowledged_at is not None:
        acknowledged = f"acknowledged by {row.acknowledged_by or 'someone who left'} at {time_text(row.acknowledged_at)}"
    lasted = f"{'open for' if is_open else 'lasted'} {age_text((until - row.raised_at).total_seconds())}"
    return AlarmView(
        id=row.id,
        tap=row.tap,
        station=row.station,
        experiment=row.experiment or "",
        experiment_id=row.experiment_id,
        title=alarm_title(row),
        state=STATE_WORDS[row.state],
        shape=_shape(row),
        level=row.level,
        raised=time_text(row.raised_at),
        since=since_text(row.raised_at, now),
        raised_ms=int(row.raised_at.timestamp() * 1000),
        lasted=lasted,
        acknowledged=acknowledged,
        note=row.note,
        is_open=is_open,
        is_waiting=row.state in {"unacknowledged", "returned-unacknowledged"},
        is_late=row.is_late,
        is_withdrawn=row.is_withdrawn,
        event_id=row.event_id,
        is_drill=row.is_drill,
        earlier=[f"{time_text(raised)} to {time_text(returned)}" for raised, returned in row.earlier_bounds],
    )


def since_text(at: datetime, now: datetime) -> str:
    """The clock time within the last 12 h, else date and time."""
    full = time_text(at)
    return full[11:16] if 0 <= (now - at).total_seconds() < 12 * 3600 else full[:16]


def alarm_title(row: AlarmRow) -> str:
    """What happened, in one line with numbers where there are any."""
    if row.is_drill:
        return f"Drill, nothing is wrong: {_title(row)}"
    return _title(row)


def _title(row: AlarmRow) -> str:
    if row.kind == "no-reading":
        return f"{row.tap}: no reading"
    if row.kind == "untrusted":
        return f"{row.tap}: readings untrusted" + (f", {row.cause}" if row.cause else "")
    crossed = "above" if row.quantity == "angle_deg" else "below"
    level = "limit" if row.level == "alarm" else "warning level"
    if row.quantity == "time_to_limit_s":
        return (f"{row.tap}: warned that recent drift reaches the limit in {both_units(row.quantity, row.value)} "
                f"(sooner than {both_units(row.quantity, row.limit)})")
    return f"{row.tap}: worst {both_units(row.quantity, row.value)}, {crossed} its {level} {both_units(row.quantity, row.limit)}"


def alarms_sentence(views: Sequence[AlarmView], *, is_filtered: bool) -> str:
    """What is waiting, in one sentence."""
    waiting = [view for view in views if view.is_waiting]
    is_open = [view for view in views if view.is_open]
    if not views:
        return "No alarm matches this choice." if is_filtered else "No alarm is open and none waits for someone."
    if not waiting:
        return (
            f"{count_text(len(is_open), 'alarm')} open, all acknowledged."
            if is_open
            else "No alarm is open and none waits for someone."
        )
    oldest = min(waiting, key=lambda view: view.raised_ms)
    returned = sum(not view.is_open for view in waiting)
    verb = "waits" if len(waiting) == 1 else "wait"
    said = f"{count_text(len(waiting), 'alarm')} {verb} for someone, the oldest since {oldest.since} UTC"
    return said + (f"; {returned} of them came back by {'itself' if returned == 1 else 'themselves'}." if returned else ".")


def _shape(row: AlarmRow) -> str:
    if row.kind == "no-reading":
        return "mark-no-reading"
    if row.kind == "untrusted":
        return "mark-untrusted"
    return "mark-below" if row.level == "alarm" else "mark-thin"
