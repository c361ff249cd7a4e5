"""A week of runs: rooms and benches down, the lab's own days across. Days begin at the lab's midnight, whatever its clocks do."""

from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, time, timedelta
from zoneinfo import ZoneInfo

DAYS = 7


@dataclass(frozen=True, slots=True)
class Slot:
    """A run that touches a bench: the run's id and name, its times, its state."""

    run_id: int
    name: str
    starts_at: datetime
    over_at: datetime
    state: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """A run on one day: ``20:00–24:00`` or ``goes on until 08:00``."""

    run_id: int
    name: str
    times: str
    state: str


@dataclass(frozen=True, slots=True)
class BenchWeek:
    """A bench's seven days."""

    bench: str
    days: list[list[Entry]]


@dataclass(frozen=True, slots=True)
class RoomWeek:
    """A room's benches, by name."""

    room: str
    benches: list[BenchWeek] = field(default_factory=list)


def monday_of(day: date) -> date:
    """The Monday of its week."""
    return day - timedelta(days=day.weekday())


def day_bounds(monday: date, zone: ZoneInfo) -> list[datetime]:
    """The eight midnights (UTC) that bound the week's days; a day of clock change is 23 or 25 h long."""
    return [datetime.combine(monday + timedelta(days=number), time(), zone).astimezone(UTC) for number in range(DAYS + 1)]


def week(benches: Sequence[tuple[str, str]], slots: Sequence[tuple[str, Slot]], monday: date, zone: ZoneInfo) -> list[RoomWeek]:
    """The calendar.

    Args:
        benches: (room, bench) to show. slots: (bench, run) that touch the week.
    """
    bounds = day_bounds(monday, zone)
    of_bench: dict[str, list[Slot]] = {}
    for bench, slot in sorted(slots, key=lambda pair: (pair[1].starts_at, pair[1].run_id)):
        of_bench.setdefault(bench, []).append(slot)
    rooms: dict[str, RoomWeek] = {}
    for room, bench in sorted(benches, key=lambda pair: (pair[0] == "", pair)):
        own = of_bench.get(bench, [])
        days = [[_entry(slot, begin, end, zone) for slot in own if slot.starts_at < end and slot.over_at > begin]
                for begin, end in zip(bounds, bounds[1:], strict=False)]
        rooms.setdefault(room, RoomWeek(room or "no room")).benches.append(BenchWeek(bench, days))
    return list(rooms.values())


def _entry(slot: Slot, begin: datetime, end: datetime, zone: ZoneInfo) -> Entry:
    starts, ends = slot.starts_at.astimezone(zone), slot.over_at.astimezone(zone)
    begins_today, ends_today = slot.starts_at >= begin, slot.over_at <= end
    if begins_today and ends_today:
        times = f"{starts:%H:%M}–{'24:00' if slot.over_at == end else f'{ends:%H:%M}'}"
    elif begins_today:
        times = f"from {starts:%H:%M}"
    elif ends_today:
        times = f"until {'24:00' if slot.over_at == end else f'{ends:%H:%M}'}"
    else:
        times = "all day"
    return Entry(run_id=slot.run_id, name=slot.name, times=times, state=slot.state)
