"""Two devices on one key, new firmware, readings that never came, and how the clock ran: seen from the doors' own rows."""

import time

import pytest

from ingest.models import StationBoot
from ingest.times import now_us
from labmon.benches.queries import station_facts
from labmon.screen.station_view import boot_words
from labmon.screen.trouble_view import clock_course_words, trouble_words
from tests.ingest.conftest import sender, two_port  # noqa: F401  the fixture of the door's own tests

pytestmark = pytest.mark.django_db(transaction=True)
SECOND_US = 1_000_000


def body(first: int, count: int, *, boot: str = "aaaa", ago_s: int = 300, firmware: str = ""):
    start_us = now_us() - (ago_s + first) * SECOND_US
    return two_port(first, count, boot=boot, start_us=start_us) | ({"firmware": firmware} if firmware else {})


def said_of(station) -> str:
    facts = station_facts(station)
    return " ".join(trouble_words(facts.troubles, facts.taps)).replace("\xa0", " ")


def test_a_sound_station_has_no_trouble(sender):  # noqa: F811
    sender.send(body(0, 60))
    assert said_of(sender.station) == ""


def test_two_devices_on_one_key_are_named_with_both_addresses(sender):  # noqa: F811
    sender.send(body(0, 60, boot="aaaa"))
    sender.send(body(0, 60, boot="bbbb", ago_s=280))
    StationBoot.objects.filter(boot="bbbb").update(remote_address="192.0.2.8")
    said = said_of(sender.station)
    assert "Two devices send eom-in with one key: boot aaaa" in said and "boot bbbb from 192.0.2.8" in said


def test_an_old_boots_spool_beside_live_data_is_not_two_devices(sender):  # noqa: F811
    sender.send(body(0, 30, boot="bbbb", ago_s=100))
    sender.send(body(0, 60, boot="aaaa", ago_s=600))
    assert said_of(sender.station) == ""



def test_numbers_that_never_came_are_counted(sender):  # noqa: F811
    sender.send(body(0, 10))
    sender.send(body(130, 10, ago_s=100))
    assert "120 readings of eom-in in boot aaaa never came" in said_of(sender.station)
    sender.send(body(10, 120, ago_s=290))
    assert said_of(sender.station) == ""


def test_repeats_and_disorder_are_no_trouble(sender):  # noqa: F811
    batches = [body(first, 10, ago_s=300) for first in (20, 0, 10)]
    for batch in [*batches, *batches]:
        sender.send(batch)
    assert len(sender.stored()) == 30
    assert said_of(sender.station) == ""


def test_swapped_ports_ask_a_person(sender):  # noqa: F811
    from labmon.pipeline.catch_up import catch_up

    swapped = body(0, 60, ago_s=60)
    columns = swapped["taps"]["eom-in"]
    columns["port1"], columns["port2"] = columns["port2"], columns["port1"]
    sender.send(swapped)
    catch_up()
    said = said_of(sender.station)
    assert "eom-in: port 2 is the brighter one, though port 1 is wanted (−30.0 dB)" in said


@pytest.mark.parametrize(
    ("behind_s", "words"),
    [(3600, "one hour to the minute: daylight-saving time"), (-7200, "2 h to the minute: local time"),
     (86_400, "1 d to the minute: the date is wrong"), (420, "7 min behind")],
)
def test_clock_faults_are_told_by_their_kind(sender, behind_s, words):  # noqa: F811
    at_us = now_us() - behind_s * SECOND_US
    sender.send(two_port(0, 5, start_us=at_us - 5 * SECOND_US) | {"now": {"at": at_us}})
    said = boot_words(StationBoot.objects.get()).replace("\xa0", " ")
    assert words in said and "its own stamps are kept beside" in said


def test_the_clocks_course_is_told_with_its_doubt(sender):  # noqa: F811
    for number in range(12):
        at_us = now_us() - 5 * SECOND_US
        sender.send(two_port(number, 1, start_us=at_us - number * SECOND_US) | {"now": {"at": at_us}})
        time.sleep(0.005)
    said = clock_course_words(station_facts(sender.station).troubles.clock).replace("\xa0", " ")
    assert said.startswith("By the last 12 batches the station's clock is 5.0")
    assert " s behind the server's" in said and "±" in said
