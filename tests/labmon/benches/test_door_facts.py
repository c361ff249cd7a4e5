"""Repeats, disorder, the program's health and broken lines: from the real door to the station page's words."""

from datetime import timedelta

import pytest
from django.utils import timezone

from ingest.door import notices
from ingest.door.notices import drain, listen, stop_listening
from ingest.models import Station, StationBoot
from ingest.times import now_us
from labmon.benches.door_log import HOURS_KEPT, keep_notices
from labmon.benches.models import ClientState, DoorHour
from labmon.benches.queries import station_facts
from labmon.people.models import Role
from labmon.screen.door_view import door_troubles, door_words
from labmon.screen.station_view import station_sentence
from tests.factories import make_person
from tests.ingest.conftest import sender, two_port  # noqa: F401  the fixture of the door's own tests

pytestmark = pytest.mark.django_db(transaction=True)
SECOND_US = 1_000_000


@pytest.fixture(autouse=True)
def _kept(monkeypatch):
    """What the door notices waits until a test hands it on."""
    monkeypatch.setattr(notices, "_tell_soon", lambda: None)
    listen(print)
    yield
    stop_listening(print)


def hand_on():
    keep_notices(drain())


def body(first=0, count=10, *, ago_s=60, **more):
    return two_port(first, count, start_us=now_us() - (ago_s + first) * SECOND_US) | more


def said_of(station):
    facts = station_facts(Station.objects.get(pk=station.pk))
    said = door_troubles(facts.door, facts.taps) + door_words(facts.door, timezone.now())
    return " ".join(said).replace("\xa0", " ")


def test_a_sound_station_has_nothing_to_say(sender):  # noqa: F811
    for first in (0, 10, 20):
        sender.send(body(first, 10, ago_s=60 - first))
    hand_on()
    assert said_of(sender.station) == "" and not DoorHour.objects.exists()


def test_readings_that_came_again_are_counted_and_said(sender):  # noqa: F811
    whole = body(0, 40)
    for _ in range(32):
        sender.send(whole)
    hand_on()
    assert "1,240 readings of the last 24 h came again and were known: nothing is doubled." in said_of(sender.station)
    sender.send(whole)
    hand_on()
    assert "1,280 readings" in said_of(sender.station) and DoorHour.objects.count() == 1


def test_readings_out_of_order_are_counted_and_said(sender):  # noqa: F811
    """Of six batches of ten in the order 3 1 0 5 4 2, the readings of 1, 0, 4 and 2 come behind later ones."""
    batches = [body(10 * number, 10, ago_s=120 - 10 * number) for number in range(6)]
    for number in (3, 1, 0, 5, 4, 2):
        sender.send(batches[number])
    hand_on()
    assert "40 readings of the last 24 h came behind later ones and stand in their place." in said_of(sender.station)
    assert len(sender.stored()) == 60


def test_disorder_within_a_batch_is_counted_too(sender):  # noqa: F811
    shuffled = body(0, 6)
    columns = shuffled["taps"]["eom-in"]
    order = [0, 3, 1, 2, 5, 4]
    shuffled["taps"]["eom-in"] = {name: [values[place] for place in order] for name, values in columns.items()}
    sender.send(shuffled)
    hand_on()
    assert "3 readings of the last 24 h came behind later ones" in said_of(sender.station)


def test_old_hours_go(sender):  # noqa: F811
    hour_at = timezone.now().replace(minute=0, second=0, microsecond=0) - HOURS_KEPT - timedelta(hours=1)
    DoorHour.objects.create(station=sender.station, hour_at=hour_at, known=5)
    sender.send(body())
    sender.send(body() | {"boot": "again"})
    whole = body(100)
    sender.send(whole)
    sender.send(whole)
    hand_on()
    assert not DoorHour.objects.filter(hour_at=hour_at).exists()
    assert "5 readings" not in said_of(sender.station)


def test_the_programs_health_is_told_in_words(sender):  # noqa: F811
    sender.send(body(client={"waiting": 5210, "dropped": 3, "restarts": 2, "clock": "synchronized", "mute": []}))
    hand_on()
    said = said_of(sender.station)
    assert "5,210 readings waited at the bench to be sent" in said
    assert "5,210 readings wait in its spool, 3 dropped since the spool was made, 2 restarts" in said
    assert "its clock is kept by: synchronized" in said
    sender.send(body(client={"waiting": 0, "dropped": 0, "restarts": 2, "clock": "synchronized", "mute": []}))
    hand_on()
    assert "waited at the bench" not in said_of(sender.station) and ClientState.objects.count() == 1


def test_a_mute_instrument_differs_from_a_silent_station(sender):  # noqa: F811
    sender.send(body(0, 5, ago_s=300))
    sender.send({"boot": "7f3a", "taps": {}, "client": {"mute": ["eom-in"]}})
    hand_on()
    facts = station_facts(sender.station)
    assert "eom-in: the instrument is mute. The bench's program lives and gets no answer from it" in said_of(sender.station)
    (tap,) = [one for one in facts.taps if one.name == "eom-in"]
    assert tap.is_mute


def test_a_source_that_gives_nothing_is_told_from_a_silent_station_by_arrivals(sender):  # noqa: F811
    sender.send(body(0, 5, ago_s=600))
    tap = sender.tap()
    tap.heard.last_arrival_us = now_us() - 500 * SECOND_US
    tap.heard.save()
    StationBoot.objects.update(last_arrival_us=now_us() - 500 * SECOND_US)
    from ingest.models import DoorUp

    DoorUp.objects.all().delete()
    DoorUp.objects.create(process="6e0b1b0e-0000-4000-8000-000000000001", from_us=now_us() - 900 * SECOND_US, until_us=now_us())
    facts = station_facts(sender.station)
    assert "though its station" not in station_sentence("bench-1", facts, 0) and said_of(sender.station) == ""
    sender.send({"boot": "7f3a", "taps": {}})
    facts = station_facts(sender.station)
    assert "though its station lives" in station_sentence("bench-1", facts, 0)
    assert "though its station is heard: the source behind it gives no readings" in said_of(sender.station)


def test_a_broken_line_is_a_hint_until_something_comes(sender):  # noqa: F811
    sender.send(body())
    Station.objects.update(link_lost_at=timezone.now() + timedelta(seconds=1))
    assert "that this station's line broke; nothing has come since. It is a hint" in said_of(sender.station)
    Station.objects.update(link_lost_at=timezone.now() - timedelta(minutes=1))
    sender.send(body(20))
    assert "line broke" not in said_of(sender.station)


def test_it_stands_on_the_page(sender, client):  # noqa: F811
    whole = body()
    sender.send(whole)
    sender.send(whole | {"client": {"mute": ["eom-in"], "waiting": 1}})
    hand_on()
    client.force_login(make_person(Role.MANAGER))
    page = client.get("/stations/bench-1/").content.decode()
    assert "10 readings of the last 24 h came again" in page
    assert "the instrument is mute" in page and "1 reading waits in its spool" in page
