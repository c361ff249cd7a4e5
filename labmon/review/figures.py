"""Figures of a week of calls, from plain rows. Pure: no database, no clock."""

import math
from collections import Counter, defaultdict
from collections.abc import Hashable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from statistics import median
from typing import Final

#: Night and office hours, UTC, as the rehearsal of limits has its nights.
NIGHT_FROM_H, NIGHT_UNTIL_H = 22, 6
OFFICE_FROM_H, OFFICE_UNTIL_H, OFFICE_DAYS = 8, 18, 5
CHATTER_COUNT, CHATTER_WITHIN = 3, timedelta(seconds=60)
STALE_AFTER = timedelta(hours=24)
FLOOD_WITHIN = timedelta(minutes=10)
FLOOD_OVER: Final = 10


@dataclass(frozen=True, slots=True)
class AlarmFacts:
    """One alarm; ``source`` is what raises it (a limit, or a tap's silence), the same each time."""

    source: Hashable
    raised_at: datetime
    returned_at: datetime | None
    told_at: datetime
    acknowledged_at: datetime | None


@dataclass(frozen=True, slots=True)
class CallFacts:
    """One call of one person; ``person`` is None for the lab's own mailbox."""

    person: Hashable | None
    at: datetime
    is_reminder: bool


@dataclass(frozen=True, slots=True)
class PersonCalls:
    """How often someone was called. ``nights`` has the calls of each night by the date on which it began."""

    person: Hashable | None
    calls: int
    reminders: int
    at_night: int
    worst_night: int
    nights: dict[str, int]


@dataclass(frozen=True, slots=True)
class Nuisance:
    """A source with how often it raised, and its share of all."""

    source: Hashable
    count: int
    share: float
    median_open_s: float | None


@dataclass(frozen=True, slots=True)
class AckTimes:
    """From being told to taking it; shares are of ``count``. NaN-free: None where nothing was taken."""

    count: int
    taken: int
    median_s: float | None
    p90_s: float | None


def is_night(at: datetime) -> bool:
    """Between 22:00 and 06:00 UTC."""
    return not NIGHT_UNTIL_H <= at.astimezone(UTC).hour < NIGHT_FROM_H


def night_of(at: datetime) -> str:
    """The date on which the night of ``at`` began."""
    return (at.astimezone(UTC) - timedelta(hours=NIGHT_UNTIL_H)).date().isoformat()


def is_office_time(at: datetime) -> bool:
    """Monday to Friday, 08:00 to 18:00 UTC."""
    moment = at.astimezone(UTC)
    return moment.weekday() < OFFICE_DAYS and OFFICE_FROM_H <= moment.hour < OFFICE_UNTIL_H


def calls_by_person(calls: Sequence[CallFacts]) -> list[PersonCalls]:
    """Most called first."""
    by_person: dict[Hashable | None, list[CallFacts]] = defaultdict(list)
    for call in calls:
        by_person[call.person].append(call)
    rows = []
    for person, own in by_person.items():
        nights = Counter(night_of(call.at) for call in own if is_night(call.at))
        rows.append(PersonCalls(person, sum(not call.is_reminder for call in own), sum(call.is_reminder for call in own),
                                sum(nights.values()), max(nights.values(), default=0), dict(sorted(nights.items()))))
    return sorted(rows, key=lambda row: (-row.calls - row.reminders, str(row.person)))


def outside_office_share(calls: Sequence[CallFacts]) -> float | None:
    """Share of calls, 0 to 1; None where there was none."""
    return sum(not is_office_time(call.at) for call in calls) / len(calls) if calls else None


def worst_nuisances(alarms: Sequence[AlarmFacts], most: int = 5) -> list[Nuisance]:
    """The sources that raised most often, more than once."""
    by_source: dict[Hashable, list[AlarmFacts]] = defaultdict(list)
    for alarm in alarms:
        by_source[alarm.source].append(alarm)
    rows = []
    for source, own in by_source.items():
        lengths = [(alarm.returned_at - alarm.raised_at).total_seconds() for alarm in own if alarm.returned_at is not None]
        rows.append(Nuisance(source, len(own), len(own) / len(alarms), median(lengths) if lengths else None))
    rows = [row for row in rows if row.count > 1]
    return sorted(rows, key=lambda row: (-row.count, str(row.source)))[:most]


def top_share(alarms: Sequence[AlarmFacts], sources: int = 10) -> float | None:
    """Share of all alarms that the most frequent sources raised; None where there was none."""
    counts = Counter(alarm.source for alarm in alarms)
    return sum(count for _, count in counts.most_common(sources)) / len(alarms) if alarms else None


def chattering(alarms: Sequence[AlarmFacts]) -> list[Hashable]:
    """Sources that raised three times or more within one minute (sliding, the minute's end included)."""
    by_source: dict[Hashable, list[datetime]] = defaultdict(list)
    for alarm in alarms:
        by_source[alarm.source].append(alarm.raised_at)
    found = [source for source, times in by_source.items() if most_within(times, CHATTER_WITHIN) >= CHATTER_COUNT]
    return sorted(found, key=str)


def stale(alarms: Sequence[AlarmFacts], until_at: datetime) -> list[AlarmFacts]:
    """Open for more than a day, by ``until_at`` at the latest; the longest first."""
    found = [(min(alarm.returned_at or until_at, until_at) - alarm.raised_at, alarm) for alarm in alarms]
    return [alarm for length, alarm in sorted(found, key=lambda pair: -pair[0].total_seconds()) if length > STALE_AFTER]


def most_within(times: Sequence[datetime], width: timedelta) -> int:
    """Most of them in any stretch of this width, both ends included."""
    ordered = sorted(times)
    most = first = 0
    for last, at in enumerate(ordered):
        while at - ordered[first] > width:
            first += 1
        most = max(most, last - first + 1)
    return most


def ack_times(alarms: Sequence[AlarmFacts]) -> AckTimes:
    """Median and 90 % (nearest rank: the smallest that at least so many do not exceed) of those that were taken."""
    taken = sorted((alarm.acknowledged_at - alarm.told_at).total_seconds() for alarm in alarms if alarm.acknowledged_at)
    taken = [max(seconds, 0.0) for seconds in taken]
    rank = max(math.ceil(0.9 * len(taken)) - 1, 0)
    return AckTimes(len(alarms), len(taken), median(taken) if taken else None, taken[rank] if taken else None)
