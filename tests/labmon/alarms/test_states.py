"""The whole life of an alarm: every combination of facts, every event, against a table written out by hand (states of
IEC 62682 and ANSI/ISA-18.2, from memory; the same table stands in docs/alarms.md), and against the database's own check."""

from dataclasses import dataclass, replace
from itertools import product
from pathlib import Path

import pytest
from django.db import IntegrityError, transaction

from labmon.alarms.models import Alarm, AlarmState
from labmon.alarms.states import is_quiet, state_of
from tests.factories import NOON, make_tap

N, U, A, R = AlarmState.NORMAL, AlarmState.UNACKNOWLEDGED, AlarmState.ACKNOWLEDGED, AlarmState.RETURNED_UNACKNOWLEDGED
S, D, O = AlarmState.SHELVED, AlarmState.SUPPRESSED, AlarmState.OUT_OF_SERVICE  # noqa: E741
STATES = (N, U, A, R, S, D, O)


@dataclass(frozen=True)
class Facts:
    """What decides a state."""

    is_withdrawn: bool
    is_late: bool
    is_suppressed: bool
    is_out_of_service: bool
    shelved_until: object
    returned_at: object
    acknowledged_at: object


#: All 128 of them.
FACTS = [
    Facts(*flags, *(NOON if one else None for one in times))
    for flags in product((False, True), repeat=4)
    for times in product((False, True), repeat=3)
]

#: What writers do to an open alarm's facts (marks of holds change only while it is open).
EVENTS = {
    "acknowledge": lambda f: replace(f, acknowledged_at=f.acknowledged_at or NOON),
    "return": lambda f: replace(f, returned_at=f.returned_at or NOON),
    "open again": lambda f: replace(f, returned_at=None),
    "rise": lambda f: f if f.is_late or f.is_withdrawn else replace(f, acknowledged_at=None),
    "shelve": lambda f: f if f.returned_at else replace(f, shelved_until=NOON),
    "unshelve": lambda f: f if f.returned_at else replace(f, shelved_until=None),
    "take out": lambda f: f if f.returned_at else replace(f, is_out_of_service=True),
    "put back": lambda f: f if f.returned_at else replace(f, is_out_of_service=False),
    "withdraw": lambda f: replace(f, is_withdrawn=True),
}

#: From each state by each event to these states and no others; where there are several, the facts underneath decide.
TABLE = {
    #               N                   U     A        R     S            D       O
    "acknowledge": ({N},                {A},  {A},     {N},  {S},         {D},    {O}),
    "return":      ({N},                {R, N}, {N},   {R},  {N},         {N},    {N}),
    "open again":  ({N, U, A, S, D, O}, {U},  {A},     {U},  {S},         {D},    {O}),
    "rise":        ({N, R},             {U},  {A, U},  {R},  {S},         {D},    {O}),
    "shelve":      ({N},                {S},  {S},     {R},  {S},         {D},    {O}),
    "unshelve":    ({N},                {U},  {A},     {R},  {U, A},      {D},    {O}),
    "take out":    ({N},                {O},  {O},     {R},  {O},         {O},    {O}),
    "put back":    ({N},                {U},  {A},     {R},  {S},         {D},    {U, A, S, D}),
    "withdraw":    ({N},                {N},  {N},     {N},  {N},         {N},    {N}),
}  # fmt: skip


@pytest.mark.parametrize("event", EVENTS)
@pytest.mark.parametrize("state", STATES)
def test_every_event_in_every_state_leads_where_the_table_says(state, event):
    reached = {state_of(EVENTS[event](facts)) for facts in FACTS if state_of(facts) == state}
    assert reached == TABLE[event][STATES.index(state)]


def test_the_table_of_the_docs_is_this_one():
    page = (Path(__file__).parents[3] / "docs" / "alarms.md").read_text(encoding="utf-8")
    said = {}
    for line in page.splitlines():
        cells = [cell.strip() for cell in line.strip("|").split("|")]
        if cells[0] in EVENTS:
            said[cells[0]] = tuple({AlarmState(word) for word in cell.split(" or ")} for cell in cells[1:])
    assert said == TABLE


def test_withdrawn_is_normal_and_an_open_one_never_is():
    for facts in FACTS:
        state = state_of(facts)
        if facts.is_withdrawn:
            assert state == N
        elif facts.returned_at is None:
            assert state not in (N, R)
        else:
            assert state in (N, R)
        assert not is_quiet(facts) or state not in (U, A, R)


@pytest.mark.django_db
def test_the_database_takes_the_state_that_follows_and_no_other():
    tap = make_tap()
    for facts in FACTS:
        values = {name: getattr(facts, name) for name in Facts.__dataclass_fields__}
        for state in STATES:
            alarm = Alarm(kind="untrusted", tap=tap, raised_at=NOON, message="m", state=state, **values)
            if state == state_of(facts):
                with transaction.atomic():
                    alarm.save()
                    alarm.delete()
            else:
                with pytest.raises(IntegrityError, match="alarm_state_follows_from_its_facts"), transaction.atomic():
                    alarm.save()
