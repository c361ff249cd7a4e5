"""Lines of mosquitto 2.0.11's own log (as seen), and what they say of who was turned away."""

from hypothesis import given
from hypothesis import strategies as st

from ingest.mqtt.broker_log import BrokerLog


def said(*lines):
    log = BrokerLog()
    return [found for line in lines if (found := log.turned_away(line)) is not None]


def test_who_is_turned_away_is_known_by_address():
    assert said("1796138080: New connection from 192.0.2.7:45431 on port 1883.",
                "1796138080: Client <unknown> disconnected, not authorised.") == ["192.0.2.7"]


def test_who_is_let_in_or_leaves_is_not_meant():
    assert said("1: New connection from 192.0.2.8:3314 on port 1883.",
                "1: New client connected from 192.0.2.8:3314 as bench-7 (p2, c1, k60, u'bench-7').",
                "1: New connection from 2001:db8::7:4543 on port 1883.",
                "2: Client <unknown> disconnected, not authorised.",
                "3: Client bench-7 disconnected.") == ["2001:db8::7"]


def test_without_its_beginning_the_address_is_not_known():
    assert said("1: Client <unknown> disconnected, not authorised.") == [""]


@given(st.lists(st.text(max_size=80), max_size=10))
def test_other_lines_say_nothing(lines):
    assert said(*(line.replace("not authorised", "") for line in lines)) == []
