"""New firmware and exchanged ports: doubtful from their own moment on, asked of a person, and gone when one has spoken."""

from datetime import timedelta

import numpy as np
import pytest
from django.utils import timezone

from analysis.judge.rule import Quantity
from analysis.models import Doubt, RollupDue
from analysis.record.reduce_span import reduced_samples
from analysis.reduce.trust import Reason, Trust
from ingest.models import StationBoot, TapKind
from ingest.times import at_of, now_us
from labmon.audit.models import AuditEntry
from labmon.benches.calibration import set_calibration
from labmon.benches.doubts import answer_doubt
from labmon.errors import NotAllowed, WriteError
from labmon.logbook.models import ConfigurationChange
from labmon.people.models import Role
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.doubting import cast_doubts
from labmon.screen.station import station_facts
from labmon.screen.trouble_view import questions
from tests.factories import make_person, make_station, make_tap, store_readings

pytestmark = pytest.mark.django_db
SECOND_US = 1_000_000


def light(count, *, swapped=False, seed=1):
    """20 dB on 1 mW with a little noise; ports the other way round where swapped."""
    rng = np.random.default_rng(seed)
    bright, dark = 1e-3 * (1 + 1e-3 * rng.normal(size=count)), 1e-5 * (1 + 1e-3 * rng.normal(size=count))
    return {"port1": dark, "port2": bright} if swapped else {"port1": bright, "port2": dark}


def boots_of(*firmwares, overlap_s=0, kind=TapKind.TWO_PORT, names=("eom-in",)):
    """A station that was started anew every five minutes, each time with the next firmware, up to now."""
    station = make_station("n2")
    taps = [make_tap(station, name, kind=kind) for name in names]
    begin_us = now_us() - 300 * len(firmwares) * SECOND_US
    for number, firmware in enumerate(firmwares):
        at_us = begin_us + (300 * number + np.arange(240 + overlap_s, dtype=np.int64)) * SECOND_US
        values = light(len(at_us)) if kind == TapKind.TWO_PORT else {"s0": 1.0, "s1": 1.0, "s2": 0.0, "s3": 0.0}
        for tap in taps:
            store_readings(tap, at_us, boot=f"boot{number}", sequence=np.arange(len(at_us)), **values)
        StationBoot.objects.filter(boot=f"boot{number}").update(firmware=firmware, first_arrival_us=at_us[0])
    return taps, begin_us


def share_with(tap, reason, from_us, until_us):
    samples = reduced_samples(tap, from_us, until_us)
    return float(((samples.reasons[Quantity.ER_DB] & np.uint32(reason)) != 0).mean())


def said_of(station):
    return " ".join(one.words for one in questions(station_facts(station).doubts)).replace("\xa0", " ")


def test_new_firmware_casts_doubt_from_its_boot_on_and_is_a_configuration_change():
    (tap,), begin_us = boots_of("board 1.4", "board 1.4", "board 1.5")
    assert cast_doubts() == 1 and cast_doubts() == 0
    assert share_with(tap, Reason.NEW_FIRMWARE, begin_us, begin_us + 600 * SECOND_US) == 0.0
    assert share_with(tap, Reason.NEW_FIRMWARE, begin_us + 600 * SECOND_US, now_us()) == 1.0
    samples = reduced_samples(tap, begin_us + 600 * SECOND_US, now_us())
    assert set(samples.trust[Quantity.ER_DB].tolist()) == {int(Trust.DOUBTFUL)}
    change = ConfigurationChange.objects.get()
    assert change.at == at_of(begin_us + 600 * SECOND_US) and "board 1.5 after board 1.4" in change.text
    said = said_of(tap.station)
    assert "board 1.5 after board 1.4" in said and "until the zeros are taken again, or someone confirms" in said
    assert RollupDue.objects.filter(tap=tap, first_at_us=begin_us + 600 * SECOND_US).exists()


def test_zeros_taken_since_end_it_and_nobody_is_asked_any_more():
    (tap,), begin_us = boots_of("board 1.4", "board 1.5")
    cast_doubts()
    set_calibration(tap, at_of(begin_us + 400 * SECOND_US), {"zero1": 0.0, "zero2": 0.0}, by=None)
    assert share_with(tap, Reason.NEW_FIRMWARE, begin_us + 300 * SECOND_US, begin_us + 399 * SECOND_US) == 1.0
    assert share_with(tap, Reason.NEW_FIRMWARE, begin_us + 400 * SECOND_US, now_us()) == 0.0
    assert said_of(tap.station) == ""


def test_a_persons_word_ends_it_for_good():
    (tap,), begin_us = boots_of("board 1.4", "board 1.5")
    cast_doubts()
    person = make_person(Role.MANAGER)
    with pytest.raises(NotAllowed):
        answer_doubt(Doubt.objects.get().pk, "right", by=make_person(Role.RESEARCHER))
    with pytest.raises(WriteError):
        answer_doubt(Doubt.objects.get().pk, "perhaps", by=person)
    answer_doubt(Doubt.objects.get().pk, "right", by=person)
    assert share_with(tap, Reason.NEW_FIRMWARE, begin_us, now_us()) == 0.0
    assert AuditEntry.objects.get(action="answer doubt").person == person
    assert cast_doubts() == 0 and said_of(tap.station) == ""


def test_several_taps_of_a_station_make_one_question_and_one_change():
    taps, _ = boots_of("board 1.4", "board 1.5", names=("eom-in", "eom-out"))
    assert cast_doubts() == 2
    (question,) = questions(station_facts(taps[0].station).doubts)
    assert len(question.ids) == 2 and "eom-in and eom-out is doubtful" in question.words
    assert question.zeros_of == ["eom-in", "eom-out"] and ConfigurationChange.objects.count() == 1


def test_a_polarimeter_has_no_zeros_to_take():
    (tap,), _ = boots_of("logger 1", "logger 2", kind=TapKind.STOKES)
    cast_doubts()
    said = said_of(tap.station)
    assert "until someone confirms" in said and "zeros are taken" not in said


@pytest.mark.parametrize("case", [{"firmwares": ("board 1.4", "board 1.4")}, {"firmwares": ("", "board 1.4")},
                                  {"firmwares": ("board 1.4", "spare 1.4"), "overlap_s": 120}])
def test_the_same_firmware_the_first_one_told_and_a_second_device_are_none(case):
    firmwares = case.pop("firmwares")
    boots_of(*firmwares, **case)
    assert cast_doubts() == 0


def exchanged(at_s=200, count=240, back_s=None):
    tap = make_tap(make_station("n3"), "eom-in")
    begin_us = now_us() - count * SECOND_US
    straight, turned = light(count), light(count, swapped=True)
    seconds = np.arange(count)
    is_turned = (seconds >= at_s) & (seconds < (back_s or count))
    columns = {name: np.where(is_turned, turned[name], straight[name]) for name in straight}
    store_readings(tap, begin_us + seconds * SECOND_US, **columns)
    catch_up()
    return tap, begin_us


def test_exchanged_ports_are_doubtful_from_that_reading_on_and_asked_of_a_person():
    tap, begin_us = exchanged()
    assert cast_doubts() == 1 and cast_doubts() == 0
    assert share_with(tap, Reason.PORTS_SWAPPED, begin_us, begin_us + 199_500_000) == 0.0
    assert share_with(tap, Reason.PORTS_SWAPPED, begin_us + 200 * SECOND_US, now_us()) == 1.0
    said = said_of(tap.station)
    assert "port 2 became the brighter one within one reading, the sum of both stayed" in said and "look at the bench" in said
    answer_doubt(Doubt.objects.get().pk, "mended", by=make_person(Role.MANAGER))
    assert share_with(tap, Reason.PORTS_SWAPPED, begin_us + 200 * SECOND_US, now_us()) == 1.0
    store_readings(tap, now_us() + np.arange(1, 5) * SECOND_US, **light(4))
    later_us = now_us() + SECOND_US // 2
    assert share_with(tap, Reason.PORTS_SWAPPED, later_us, later_us + 10 * SECOND_US) == 0.0
    assert cast_doubts() == 0


def test_light_that_was_meant_to_be_turned_is_believed_again():
    tap, begin_us = exchanged()
    cast_doubts()
    answer_doubt(Doubt.objects.get().pk, "right", by=make_person(Role.MANAGER))
    assert share_with(tap, Reason.PORTS_SWAPPED, begin_us, now_us()) == 0.0
    assert cast_doubts() == 0


def test_ports_that_are_right_again_are_not_asked_about():
    exchanged(at_s=100, back_s=150)
    assert cast_doubts() == 0


def test_a_bench_below_its_limit_without_an_exchange_is_not_asked_about():
    tap = make_tap()
    store_readings(tap, now_us() - np.arange(240)[::-1] * SECOND_US, **light(240, swapped=True))
    catch_up()
    assert cast_doubts() == 0


def test_the_page_asks_and_takes_the_answer(client):
    (tap,), _ = boots_of("board 1.4", "board 1.5")
    cast_doubts()
    client.force_login(make_person(Role.RESEARCHER))
    assert "Nothing of the measurement has changed" not in client.get("/stations/n2/").content.decode()
    person = make_person(Role.MANAGER)
    client.force_login(person)
    assert "Nothing of the measurement has changed" in client.get("/stations/n2/").content.decode()
    typed = {"doubt": [Doubt.objects.get().pk], "answer": "right"}
    answer = client.post("/stations/n2/doubts/", typed, follow=True).content.decode()
    assert "Thank you" in answer and "New firmware since" not in answer
    row = Doubt.objects.get()
    assert (row.answer, row.answered_by) == ("right", person.username)
    assert timezone.now() - row.answered_at < timedelta(minutes=1)
    assert client.post("/stations/n1/doubts/", typed).status_code == 404


def test_the_page_asks_as_many_queries_for_one_doubt_as_for_many(client):
    from tests.labmon.screen.test_pages import queries_of

    client.force_login(make_person(Role.MANAGER))
    taps, _ = boots_of("board 1.4", "board 1.5", names=[f"tap-{number}" for number in range(12)])
    queries_of(client, "/stations/n2/")
    without = queries_of(client, "/stations/n2/")
    cast_doubts()
    assert Doubt.objects.count() == 12 and len(taps) == 12
    assert queries_of(client, "/stations/n2/") == without
