"""A week of calls in words, beside published figures. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime, timedelta

from labmon.review.figures import (
    FLOOD_OVER,
    FLOOD_WITHIN,
    AckTimes,
    ack_times,
    calls_by_person,
    chattering,
    most_within,
    outside_office_share,
    stale,
    top_share,
    worst_nuisances,
)
from labmon.review.queries import Week
from labmon.screen.present import MISSING, age_text, count_text, number_text, time_text

PUBLISHED_NOTE = (
    "The figures are for control rooms that are staffed around the clock; a lab whose people sleep should stand far below them."
)


@dataclass(frozen=True, slots=True)
class PersonRow:
    """Calls of one person."""

    name: str
    calls: int
    reminders: int
    at_night: int
    worst_night: str
    nights: str


@dataclass(frozen=True, slots=True)
class NuisanceRow:
    """One of the worst."""

    name: str
    count: int
    share: str
    open_for: str


@dataclass(frozen=True, slots=True)
class Comparison:
    """A figure of the week beside a published one. ``mark`` is a word where it is beyond it."""

    name: str
    here: str
    published: str
    source: str
    mark: str


@dataclass(frozen=True, slots=True)
class CallsView:
    """The page of a week."""

    sentence: str
    people: list[PersonRow]
    nuisances: list[NuisanceRow]
    chattering: list[str]
    stale: list[str]
    taken: str
    outside: str
    comparisons: list[Comparison]
    is_empty: bool
    is_cut: bool


def calls_view(week: Week, until_at: datetime, *, reader_id: int, sees_names: bool) -> CallsView:
    """``until_at``: the week's end, or now while it lasts. Names of others only for who may see them: calls are personal."""
    rows = calls_by_person(week.calls)
    ringing = [call for call in week.calls if not call.is_reminder]
    taken = ack_times(week.alarms)
    stale_ones = stale([*week.alarms, *week.older], until_at)
    days = max((until_at - _first(week, until_at)).total_seconds() / 86_400, 1.0) if week.alarms else 7.0
    return CallsView(
        sentence=_sentence(len(ringing), sum(row.at_night for row in rows), len(rows), len(week.alarms)),
        people=[
            PersonRow(week.people.get(row.person, "") if sees_names or row.person == reader_id else f"person {number}",
                      row.calls, row.reminders, row.at_night, str(row.worst_night) if row.worst_night else MISSING,
                      ", ".join(f"{night[5:]}: {count}" for night, count in row.nights.items()) or MISSING)
            for number, row in enumerate(rows, 1)
        ],
        nuisances=[
            NuisanceRow(week.sources[one.source], one.count, _percent(one.share), age_text(one.median_open_s)
                        if one.median_open_s is not None else "still open")
            for one in worst_nuisances(week.alarms)
        ],
        chattering=[week.sources[source] for source in chattering(week.alarms)],
        stale=[f"{week.sources[one.source]}: since {time_text(one.raised_at)}"
               + (f" to {time_text(one.returned_at)}" if one.returned_at and one.returned_at < until_at else ", still open")
               for one in stale_ones],
        taken=_taken(taken),
        outside=_percent(outside_office_share(ringing)),
        comparisons=_comparisons(week, len(stale_ones), days, len(rows)),
        is_empty=not (week.alarms or week.calls or stale_ones),
        is_cut=week.is_cut,
    )


def _first(week: Week, until_at: datetime) -> datetime:
    """Midnight of the week's Monday."""
    return monday_of(until_at - timedelta(microseconds=1))


def monday_of(at: datetime) -> datetime:
    """00:00 UTC of the Monday of its week."""
    midnight = at.replace(hour=0, minute=0, second=0, microsecond=0)
    return midnight - timedelta(days=midnight.weekday())


def week_name(monday: datetime) -> str:
    """ISO 8601: ``2031-W10``."""
    year, week, _ = monday.date().isocalendar()
    return f"{year}-W{week:02d}"


def monday_named(text: str) -> date | None:
    """The Monday of ``2031-W10``; None where it is no week."""
    try:
        year, _, week = text.partition("-W")
        return date.fromisocalendar(int(year), int(week), 1)
    except (ValueError, OverflowError):
        return None


def _sentence(calls: int, at_night: int, people: int, alarms: int) -> str:
    if not calls:
        return f"Nobody was called this week; {count_text(alarms, 'alarm')} {'was' if alarms == 1 else 'were'} raised."
    night = f"{at_night} of them at night" if at_night else "none of them at night"
    return f"{count_text(calls, 'call')} this week to {count_text(people, 'person', 'people')}, {night}."


def _taken(times: AckTimes) -> str:
    if not times.count:
        return "No alarm to take."
    if times.median_s is None or times.p90_s is None:
        return f"None of {count_text(times.count, 'alarm')} was taken."
    return (f"{times.taken} of {count_text(times.count, 'alarm')} taken: half within {age_text(times.median_s)}, "
            f"90{chr(0xA0)}% within {age_text(times.p90_s)} of being raised here.")


def _comparisons(week: Week, stale_count: int, days: float, people: int) -> list[Comparison]:
    a_day = len(week.alarms) / days
    flood = most_within([alarm.raised_at for alarm in week.alarms], FLOOD_WITHIN)
    top, chatter = top_share(week.alarms), len(chattering(week.alarms))
    read, memory = "read in secondary texts", "from memory"
    return [
        Comparison("Alarms a day, in all", number_text(a_day, 1), "about 144 to 150 for each person watching; 300 at most",
                   f"IEC 62682:2014 (144), ANSI/ISA-18.2-2009 (150, 300); {read}", _beyond(a_day > 150)),
        Comparison("Most alarms in 10 minutes", str(flood), "a flood begins above 10",
                   f"ANSI/ISA-18.2-2009, EEMUA Publication 191; {read}", _beyond(flood > FLOOD_OVER)),
        Comparison("Chattering (3 or more in a minute)", str(chatter), "none",
                   f"ANSI/ISA-18.2-2009; three a minute {read}, none {memory}", _beyond(chatter > 0)),
        Comparison("Stale (open for over 24 h)", str(stale_count), "fewer than 5 on any day",
                   f"ANSI/ISA-18.2-2009; 24 h {read}, fewer than 5 {memory}", _beyond(stale_count >= 5)),
        Comparison("Share of the ten most frequent", _percent(top), f"1 to 5{chr(0xA0)}% (says little of a lab with few limits)",
                   f"ANSI/ISA-18.2-2009; {memory}", ""),
    ]


def _beyond(is_beyond: bool) -> str:
    return "beyond it" if is_beyond else "within"


def _percent(share: float | None) -> str:
    return MISSING if share is None else f"{100 * share:.0f}{chr(0xA0)}%"


def earlier_and_later(monday: datetime, this_monday: datetime) -> Sequence[tuple[str, str]]:
    """Names of the weeks beside; none ahead."""
    ways = [("Week before", week_name(monday - timedelta(days=7)))]
    return ways + ([("Week after", week_name(monday + timedelta(days=7)))] if monday < this_monday else [])
