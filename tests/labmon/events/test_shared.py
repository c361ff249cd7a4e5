"""Which alarms are of one event, and when the shared thing is named."""

from datetime import timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from labmon.events.shared import BenchThings, common, is_together, shared_thing
from tests.factories import NOON

ROOM, LASER, NETWORK = ("room", "North Hall"), ("laser", "Beacon"), ("network", "lab-net")
MEMBERS = {ROOM: {"n1", "n2", "n3", "n4"}, LASER: {"n1", "n2", "n3"}, NETWORK: {f"b{one}" for one in range(40)}}


def at(seconds):
    return NOON + timedelta(seconds=seconds)


@pytest.mark.parametrize(("one", "other", "wanted"), [
    ((0, 0), (30, 30), True),
    ((0, 0), (30.001, 30.001), False),
    ((0, 60), (90, 90), True),
    ((100, 100), (0, 60), False),
    ((70, 80), (0, 60), True),
], ids=str)
def test_thirty_seconds_apart_and_no_more(one, other, wanted):
    """JOB 2c: peers are benches with an event within ± 30 s."""
    spans = [tuple(at(second) for second in span) for span in (one, other)]
    assert is_together(*spans) is wanted and is_together(*reversed(spans)) is wanted


def test_a_laser_cannot_silence_and_a_network_cannot_turn_light():
    bench = BenchThings("n1", "North Hall", "Beacon", "pc-3", "lab-net")
    assert bench.things("light") == [("bench", "n1"), ROOM, LASER, ("logger", "pc-3")]
    assert bench.things("silence") == [("bench", "n1"), ROOM, ("logger", "pc-3"), NETWORK]
    assert BenchThings("n1").things("light") == [("bench", "n1")]


def test_three_benches_of_one_laser_and_a_calm_fourth_in_the_room_name_the_laser():
    """JOB 7a, job 19: 3 benches on one laser jump, others calm: names the laser."""
    assert shared_thing([ROOM, LASER], {"n1", "n2", "n3"}, MEMBERS) == LASER


@pytest.mark.parametrize(("things", "benches", "wanted"), [
    ([NETWORK], MEMBERS[NETWORK], NETWORK),
    ([("bench", "n1"), ROOM, LASER], {"n1"}, None),
    ([ROOM], {"n1", "n2"}, None),
    ([ROOM], {"n1", "n2", "n4"}, ROOM),
    ([ROOM, LASER], {"n1", "n2"}, None),
    ([ROOM, LASER], MEMBERS[ROOM] | MEMBERS[LASER], None),
], ids=["all of it", "one bench", "two of four", "three of four", "could be either", "both whole"])
def test_named_only_where_it_is_not_as_well_another(things, benches, wanted):
    assert shared_thing(things, set(benches), MEMBERS) == wanted


things = st.lists(st.sampled_from([ROOM, LASER, NETWORK, ("logger", "pc-3")]), unique=True)


@given(things, things)
def test_what_is_common_is_of_both_and_keeps_its_order(one, other):
    found = common([list(pair) for pair in one], [list(pair) for pair in other])
    assert set(found) == set(one) & set(other) and found == [pair for pair in one if pair in found]
