"""Several workers, killed transactions, dead brokers: each tap is judged once, nothing is lost."""

from threading import Barrier, Thread

import numpy as np
import pytest
from django.db import connection, transaction

from analysis.models import RollupDue, TapNow
from ingest.models import Touch
from labmon.alarms.models import Alarm
from labmon.claims import BEAT, JUDGING, claim_name, claim_taps
from labmon.experiments.actions import set_limit
from labmon.pipeline import process
from labmon.pipeline.process import process_touched
from labmon.pipeline.rolling import roll_up_due
from labmon.tell.models import Message
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_tap, store_readings
from tests.labmon.pipeline.lab import S, ports_of

pytestmark = pytest.mark.django_db(transaction=True)


@pytest.fixture(autouse=True)
def evening(monkeypatch):
    from datetime import timedelta

    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON + timedelta(hours=8))


def make_low_taps(count):
    make_person(email="chief@lab.example")
    for _ in range(count):
        tap = make_tap()
        set_limit(make_experiment(tap), tap, "er_db", alarm=20.0, on_delay_s=5.0, valid_from=NOON, by=None)
        store_readings(tap, NOON_US + np.arange(30) * S, **ports_of(np.full(30, 18.0)))


def side_by_side(count, action):
    start, faults = Barrier(count), []

    def work():
        try:
            start.wait()
            action()
        except Exception as fault:  # noqa: BLE001
            faults.append(fault)
        finally:
            connection.close()

    threads = [Thread(target=work) for _ in range(count)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(60)
    assert faults == []


def test_four_workers_judge_each_tap_once(monkeypatch):
    monkeypatch.setattr(process, "CHUNK_TAPS", 7)
    make_low_taps(40)
    side_by_side(4, lambda: process_touched(now_us=NOON_US + 31 * S))
    assert not Touch.objects.exists()
    assert Alarm.objects.count() == Message.objects.count() == TapNow.objects.count() == 40
    side_by_side(3, lambda: roll_up_due(now_us=NOON_US + 31 * S))
    assert not RollupDue.objects.filter(level_s=10).exists()


def test_worker_that_dies_before_its_commit_leaves_everything_to_the_next(monkeypatch):
    make_low_taps(3)
    with monkeypatch.context() as patch:
        patch.setattr(process, "settle_touches", lambda *_: (_ for _ in ()).throw(KeyboardInterrupt))
        with pytest.raises(KeyboardInterrupt):
            process_touched(now_us=NOON_US + 31 * S)
    assert not Alarm.objects.exists() and not TapNow.objects.exists() and Touch.objects.exists()
    process_touched(now_us=NOON_US + 31 * S)
    assert Alarm.objects.count() == 3


def test_dead_broker_costs_the_hint_not_the_judgement(monkeypatch, caplog):
    from redis.exceptions import ConnectionError as Gone

    def fail(*_):
        raise Gone("no broker")

    monkeypatch.setattr("labmon.live.publish.async_to_sync", lambda _: fail)
    make_low_taps(2)
    process_touched(now_us=NOON_US + 31 * S)
    assert Alarm.objects.count() == 2 and "publish_failed" in caplog.text


def test_claimed_tap_is_left_to_who_has_it():
    claimed = []
    with transaction.atomic():
        assert claim_taps(JUDGING, [3, 1, 2], 2) == [1, 3]
        side_by_side(1, lambda: claimed.append(claim_taps(JUDGING, [1, 2, 3], 9)))
    assert claimed == [[2]]


def test_named_job_is_done_by_one():
    got = []
    with transaction.atomic():
        assert claim_name("silence")
        side_by_side(1, lambda: got.append(claim_name("silence")))
    assert got == [False] and BEAT


def test_mark_of_a_tap_that_is_gone_holds_nobody_up():
    Touch.objects.create(tap_id=10**9, first_at_us=0, last_at_us=0, arrival_us=0)
    assert process_touched(now_us=NOON_US).taps == 0
