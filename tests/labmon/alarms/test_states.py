"""Alarm states follow from what happened (life cycle of IEC 62682, from memory)."""

import pytest

from labmon.alarms.models import Alarm, AlarmState
from labmon.alarms.states import state_of
from tests.factories import NOON


@pytest.mark.parametrize(
    ("facts", "state"),
    [
        ({}, "unacknowledged"),
        ({"acknowledged_at": NOON}, "acknowledged"),
        ({"returned_at": NOON}, "returned-unacknowledged"),
        ({"returned_at": NOON, "acknowledged_at": NOON}, "normal"),
        ({"is_late": True}, "unacknowledged"),
        ({"is_late": True, "returned_at": NOON}, "normal"),
        ({"is_withdrawn": True}, "normal"),
        ({"state": AlarmState.SHELVED}, "shelved"),
        ({"state": AlarmState.SHELVED, "returned_at": NOON}, "normal"),
        ({"state": AlarmState.SUPPRESSED}, "suppressed"),
        ({"state": AlarmState.OUT_OF_SERVICE}, "out-of-service"),
    ],
)
def test_state_follows_from_the_facts(facts, state):
    assert state_of(Alarm(**facts)) == state
