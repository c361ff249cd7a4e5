"""A week of calls from the record: what it costs depends on the week, not on how long the lab has run."""

from dataclasses import dataclass
from datetime import datetime, timedelta

from django.db.models import Q

from labmon.alarms.models import Alarm
from labmon.people.models import Person
from labmon.review.figures import AlarmFacts, CallFacts
from labmon.tell.models import Message, MessageKind

CALLS = (MessageKind.CALL, MessageKind.BACK, MessageKind.PASSED_ON, MessageKind.REMINDER)
#: An alarm that was raised longer before the week, and has returned since, is not looked for.
STALE_LOOK_BACK = timedelta(days=28)
#: A week with more is cut here, and the page says so.
MOST_ROWS = 20_000


@dataclass(frozen=True, slots=True)
class Week:
    """All of a week: alarms raised in it, alarms that may be stale in it, calls; names of sources and of people."""

    alarms: list[AlarmFacts]
    older: list[AlarmFacts]
    calls: list[CallFacts]
    sources: dict[str, str]
    people: dict[int, str]
    is_cut: bool


def week_of_calls(from_at: datetime, until_at: datetime) -> Week:
    """From ``from_at`` up to ``until_at``; late, suppressed and drilled ones left out. Four queries."""
    rows = _rows(Q(raised_at__gte=from_at, raised_at__lt=until_at))
    still = Q(returned_at=None, is_withdrawn=False) & ~Q(state="normal")
    before = Q(raised_at__lt=from_at) & (still | Q(raised_at__gte=from_at - STALE_LOOK_BACK, returned_at__gte=from_at))
    older = _rows(before)
    told = Message.objects.filter(made_at__gte=from_at, made_at__lt=until_at, kind__in=CALLS, person__isnull=False)
    told = told.exclude(event__is_drill=True).order_by("made_at").values_list("person_id", "made_at", "kind")[:MOST_ROWS]
    calls = [CallFacts(person, at, kind == MessageKind.REMINDER) for person, at, kind in told]
    people = dict(Person.objects.filter(pk__in={call.person for call in calls}).values_list("pk", "username"))
    return Week([_facts(row) for row in rows], [_facts(row) for row in older], calls, _names([*rows, *older]), people,
                max(len(rows), len(older), len(calls)) >= MOST_ROWS)


def _rows(asked: Q) -> list[Alarm]:
    shown = Alarm.objects.filter(asked, is_late=False, is_suppressed=False).exclude(event__is_drill=True)
    fields = ("kind", "quantity", "level", "limit_id", "raised_at", "returned_at", "noticed_at", "acknowledged_at",
              "tap__name", "tap__station__name")
    return list(shown.select_related("tap__station").only(*fields).order_by("raised_at")[:MOST_ROWS])


def _facts(row: Alarm) -> AlarmFacts:
    return AlarmFacts(_source(row), row.raised_at, row.returned_at, row.noticed_at, row.acknowledged_at)


def _source(row: Alarm) -> str:
    return f"limit {row.limit_id}" if row.limit_id else f"{row.kind} {row.tap_id}"


def _names(rows: list[Alarm]) -> dict[str, str]:
    """``n2/eom-in, er_db``."""
    return {_source(row): f"{row.tap.station.name}/{row.tap.name}, {row.quantity or row.kind}" for row in rows}
