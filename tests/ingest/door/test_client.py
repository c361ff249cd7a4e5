"""What a bench's program tells of itself: read leniently, for it must never cost a reading."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.door.client import ClientHealth, client_health
from tests.ingest.conftest import two_port

anything = st.recursive(st.none() | st.booleans() | st.integers() | st.floats(allow_nan=True) | st.text(max_size=300),
                        lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=9), inner, max_size=4))


def test_a_map_beside_the_readings_is_read():
    told = {"waiting": 12, "dropped": 0, "restarts": 3, "clock": "ntp", "mute": ["eom-in"]}
    assert client_health({"taps": {}, "client": told}) == ClientHealth(12, 0, 3, "ntp", ("eom-in",))


def test_columns_beside_the_newest_reading_are_read_too():
    columns = {"client_waiting": [None, 4, None], "client_mute": [None, "eom-in sop", None], "port1": [1.0, 2.0, 3.0]}
    assert client_health({"taps": {"eom-in": columns}}) == ClientHealth(waiting=4, mute=("eom-in", "sop"))


@pytest.mark.parametrize("body", [{}, {"client": {}}, {"client": 3}, {"taps": {"a": {"port1": [1.0]}}}, {"taps": [1]}])
def test_where_nothing_is_told_there_is_nothing(body):
    assert client_health(body) is None


@given(st.dictionaries(st.sampled_from(["client", "taps", "waiting"]), anything, max_size=3) | st.fixed_dictionaries(
    {"client": st.dictionaries(st.sampled_from(["waiting", "dropped", "restarts", "clock", "mute"]), anything)}))
def test_whatever_comes_is_no_fault(body):
    health = client_health(body)
    if health is not None:
        assert len(health.clock) <= 200 and "\x00" not in health.clock and all(len(one) <= 63 for one in health.mute)


def test_it_costs_no_reading(sender):
    assert sender.send(two_port(0, 3) | {"client": {"mute": 7, "waiting": -1, "clock": [1]}})["stored"] == 3
