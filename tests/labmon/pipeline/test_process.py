"""From marks to alarms: the same readings give the same episodes, however they come."""

from datetime import timedelta

import numpy as np
import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from analysis.models import RollupDue, TapNow
from ingest.models import TapKind, Touch
from labmon.alarms.models import Alarm, AlarmState
from labmon.experiments.actions import set_limit
from labmon.experiments.models import FoldCheckpoint
from labmon.people.models import Role
from labmon.pipeline.process import process_touched
from labmon.tell.models import Message
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_run, make_tap, store_readings
from tests.labmon.pipeline.lab import Feed, S, episodes, ports_of

pytestmark = pytest.mark.django_db


@pytest.fixture(autouse=True)
def limits_may_begin_at_noon(monkeypatch):
    """Tests live around noon of a day in 2031; the clock of people's writes is set to that evening."""
    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON + timedelta(hours=8))


@pytest.fixture
def owner():
    return make_person(Role.OWNER, email="owner@lab.example")


def make_limit(tap, owner=None, *, valid_from=NOON, **values):
    experiment = make_experiment(tap, owner=owner)
    wish = {"alarm": 20.0, "on_delay_s": 60.0, "off_delay_s": 60.0, "deadband": 1.0} | values
    limit = set_limit(experiment, tap, "er_db", valid_from=valid_from, by=owner, **wish).limit
    process_touched(now_us=NOON_US)
    return limit


def excursion(*parts):
    """ER of parts (dB, seconds) one after the other, one reading a second."""
    return np.concatenate([np.full(seconds, er_db, dtype=float) for er_db, seconds in parts])


def test_delay_and_hysteresis_of_the_job_paper(owner):
    """JOB 7a: limit 20, delay 60 s, 1 dB: 30 s below are none, 61 s are one; 19.9/20.1 keep it; 21.1 for 60 s clears it."""
    limit = make_limit(make_tap(), owner)
    wobble = np.tile([19.9, 20.1], 60)
    feed = Feed(limit.tap, np.concatenate([excursion((30, 60), (19.5, 30), (30, 60), (19.5, 61)), wobble, excursion((21.1, 62))]))
    feed.send(np.arange(205))
    for index in range(205, 210):
        feed.send(index)
    assert episodes(limit) == []
    feed.send(210)
    assert episodes(limit) == [(210.0, 210.0, None, "alarm", 19.5)]
    for batch in np.array_split(np.arange(211, len(feed.er_db)), 12):
        feed.send(batch)
    feed.finish()
    assert episodes(limit) == [(210.0, 210.0, 391.0, "alarm", 19.5)]
    assert Alarm.objects.get().state == AlarmState.RETURNED_UNACKNOWLEDGED
    assert [mail.event_id for mail in Message.objects.all()] == [Alarm.objects.get().event_id]
    assert Message.objects.get().recipients == ["owner@lab.example"]
    assert "extinction ratio 19.5 dB is below its alarm limit 20.0 dB by 0.5 dB (0.7°)" in Message.objects.get().subject


DAY = excursion((30, 40), (22, 90), (18, 80), (30, 100), (19, 75), (25, 200), (21, 100), (28, 50))


def undisturbed(er_db, step_us=S):
    limit = make_limit(make_tap(), warning=23.0)
    feed = Feed(limit.tap, er_db, step_us)
    feed.send(np.arange(len(er_db)), now_us=int(feed.at_us[-1]) + 10 * S)
    feed.finish()
    return episodes(limit)


def test_episodes_of_a_day_at_once():
    """By hand: warning from 40, raised 100; alarm from 130, raised 190; clear (24 dB) from 210, returned 270; next from 310."""
    assert undisturbed(DAY) == [
        (100.0, 190.0, 270.0, "alarm", 18.0),
        (370.0, 370.0, 445.0, "alarm", 19.0),
        (645.0, None, None, "warning", 21.0),
    ]


@pytest.mark.parametrize("seed", range(4))
def test_disturbed_runs_have_the_episodes_of_the_undisturbed_one(seed):
    expected = undisturbed(DAY)
    generator = np.random.default_rng(seed)
    limit = make_limit(make_tap(), warning=23.0)
    feed = Feed(limit.tap, DAY)
    cuts = np.sort(generator.choice(np.arange(1, len(DAY)), 25, replace=False))
    batches = np.split(np.arange(len(DAY)), cuts)
    generator.shuffle(batches)
    now_us = NOON_US
    for batch in batches:
        now_us += int(generator.integers(1, 20)) * S
        feed.send(batch, now_us=now_us, is_processed=bool(generator.random() < 0.7))
    feed.finish()
    feed.finish()
    assert episodes(limit) == expected
    assert not Touch.objects.exists()


@pytest.mark.parametrize("seed", range(2))
def test_fast_tap_in_shuffled_batches(seed):
    """Ten readings a second, some seconds torn apart: judged by whole seconds all the same."""
    generator = np.random.default_rng(seed)
    er_db = np.repeat(DAY[:300], 10) + generator.normal(0, 0.05, 3000)
    expected = undisturbed(er_db, S // 10)
    assert len(expected) == 1
    limit = make_limit(make_tap(interval_s=None), warning=23.0)
    feed = Feed(limit.tap, er_db, S // 10)
    batches = np.split(np.arange(3000), np.sort(generator.choice(np.arange(1, 3000), 20, replace=False)))
    for batch in batches[::2] + batches[1::2]:
        feed.send(batch, now_us=int(feed.at_us[-1]))
    feed.finish()
    assert episodes(limit) == expected


def test_slow_tap_is_judged_at_once_and_its_second_closed_two_seconds_later():
    """Its next reading is two minutes away."""
    limit = make_limit(make_tap(interval_s=120.0), on_delay_s=0.0)
    feed = Feed(limit.tap, np.array([30.0, 30.0, 18.0]), 120 * S)
    for index in range(3):
        feed.send(index)
    last_us, told = int(feed.at_us[-1]), [(240.0, 240.0, None, "alarm", 18.0)]
    assert episodes(limit) == told and TapNow.objects.get(tap=limit.tap).open_until_us == last_us + 2 * S
    process_touched(now_us=last_us + 2 * S - 1)
    assert TapNow.objects.get(tap=limit.tap).open_until_us is not None
    process_touched(now_us=last_us + 2 * S)
    assert episodes(limit) == told and TapNow.objects.get(tap=limit.tap).open_until_us is None


def test_live_second_by_second_is_the_same_as_at_once():
    day = excursion((30, 10), (22, 25), (18, 25), (30, 30))
    limits = [make_limit(make_tap(), warning=23.0, on_delay_s=10.0, off_delay_s=10.0) for _ in range(2)]
    feed = Feed(limits[0].tap, day)
    feed.send(np.arange(len(day)), now_us=int(feed.at_us[-1]) + 10 * S)
    slow = Feed(limits[1].tap, day)
    for index in range(len(day)):
        slow.send(index)
    slow.finish()
    assert episodes(limits[1]) == episodes(limits[0]) == [(20.0, 45.0, 70.0, "alarm", 18.0)]


def test_checkpoints_do_not_change_what_is_found():
    """Forty minutes pass four kept checkpoints; late readings go back to one of them only."""
    er_db = np.concatenate([DAY, excursion((30, 500)), DAY, excursion((30, 400))])
    expected = undisturbed(er_db)
    limit = make_limit(make_tap(), warning=23.0)
    feed = Feed(limit.tap, er_db)
    held_back = np.r_[1300:1340, 2000:2010]
    prompt = np.setdiff1d(np.arange(len(er_db)), held_back)
    for batch in np.array_split(prompt, 40):
        feed.send(batch)
    feed.send(held_back, now_us=int(feed.at_us[-1]))
    feed.finish()
    assert episodes(limit) == expected
    assert FoldCheckpoint.objects.filter(is_newest=False).count() >= 3


def test_raise_does_not_wait_for_the_second_to_end_and_return_does():
    limit = make_limit(make_tap(), on_delay_s=5.0, off_delay_s=5.0)
    feed = Feed(limit.tap, excursion((19, 6), (30, 20)))
    for index in range(6):
        feed.send(index)
    assert episodes(limit) == [(5.0, 5.0, None, "alarm", 19.0)]
    for index in range(6, 12):
        feed.send(index)
    assert episodes(limit)[0][2] is None
    process_touched(now_us=int(feed.at_us[11]) + 3 * S)
    assert episodes(limit)[0][2] == 11.0


def test_running_twice_changes_nothing(owner):
    limit = make_limit(make_tap(), owner)
    feed = Feed(limit.tap, excursion((30, 10), (18, 70)))
    feed.send(np.arange(80))
    before = (list(Alarm.objects.values()), Message.objects.count())
    Touch.objects.create(tap=limit.tap, first_at_us=NOON_US, last_at_us=int(feed.at_us[-1]), arrival_us=NOON_US)
    process_touched(now_us=int(feed.at_us[-1]) + 200_000)
    assert (list(Alarm.objects.values()), Message.objects.count()) == before


def test_late_excursion_that_is_over_calls_nobody(owner):
    limit = make_limit(make_tap(), owner)
    feed = Feed(limit.tap, excursion((30, 100), (18, 100), (30, 400)))
    prompt = np.r_[0:95, 205:600]
    for batch in np.array_split(prompt, 20):
        feed.send(batch)
    assert episodes(limit) == []
    feed.send(np.arange(95, 205), now_us=int(feed.at_us[-1]))
    feed.finish()
    assert episodes(limit) == [(160.0, 160.0, 260.0, "alarm", 18.0)]
    alarm = Alarm.objects.get()
    assert alarm.is_late and alarm.state == AlarmState.NORMAL and not Message.objects.exists()


def test_back_fill_that_ends_below_calls_once_when_it_becomes_current(owner):
    limit = make_limit(make_tap(), owner)
    feed = Feed(limit.tap, excursion((30, 100), (18, 900)))
    now_us = int(feed.at_us[-1])
    feed.send(np.arange(0, 400), now_us=now_us)
    alarm = Alarm.objects.get()
    assert alarm.is_late and alarm.returned_at is None and not Message.objects.exists()
    feed.send(np.arange(400, 1000), now_us=now_us)
    feed.send(np.arange(990, 1000), now_us=now_us)
    alarm.refresh_from_db()
    assert not alarm.is_late and Message.objects.count() == 1
    assert alarm.raised_at == NOON + timedelta(seconds=160)


def test_late_data_move_told_bounds_and_keep_the_old_ones(owner):
    limit = make_limit(make_tap(), owner)
    feed = Feed(limit.tap, excursion((30, 30), (18, 100), (30, 100)))
    first = np.r_[0:30, 50:230]
    for batch in np.array_split(first, 60):
        feed.send(batch)
    assert episodes(limit) == [(110.0, 110.0, 190.0, "alarm", 18.0)]
    told = Alarm.objects.get()
    feed.send(np.arange(30, 50), now_us=int(feed.at_us[-1]))
    assert episodes(limit) == [(90.0, 90.0, 190.0, "alarm", 18.0)]
    moved = Alarm.objects.get()
    assert moved.pk == told.pk and moved.raised_at == NOON + timedelta(seconds=90)
    (earlier,) = moved.earlier_bounds.all()
    assert (earlier.raised_at, earlier.returned_at) == (told.raised_at, told.returned_at)
    assert Message.objects.count() == 1


def test_told_alarm_that_late_data_deny_is_withdrawn_not_deleted(owner):
    limit = make_limit(make_tap(), owner, on_delay_s=10.0)
    feed = Feed(limit.tap, np.where(np.arange(40) % 2, 18.0, 30.0))
    for index in range(1, 25, 2):
        feed.send(index)
    assert Alarm.objects.count() == 1 and Message.objects.count() == 1
    feed.send(np.arange(0, 40, 2), now_us=int(feed.at_us[24]))
    alarm = Alarm.objects.get()
    assert alarm.is_withdrawn and alarm.state == AlarmState.NORMAL
    assert episodes(limit) == []


def test_rising_is_the_second_message_and_asks_anew(owner):
    limit = make_limit(make_tap(), owner, warning=23.0, on_delay_s=10.0)
    feed = Feed(limit.tap, excursion((30, 5), (22, 20), (19, 20)))
    for index in range(20):
        feed.send(index)
    alarm = Alarm.objects.get()
    assert alarm.level == "warning" and Message.objects.get().subject.startswith("warning: ")
    Alarm.objects.update(acknowledged_at=NOON, acknowledged_by=owner, state=AlarmState.ACKNOWLEDGED)
    for index in range(20, 45):
        feed.send(index)
    alarm.refresh_from_db()
    assert (alarm.level, alarm.state, alarm.acknowledged_at) == ("alarm", AlarmState.UNACKNOWLEDGED, None)
    assert [mail.level for mail in Message.objects.order_by("pk")] == ["warning", "alarm"]


def test_acknowledged_alarm_returns_to_normal(owner):
    limit = make_limit(make_tap(), owner, on_delay_s=5.0, off_delay_s=5.0)
    feed = Feed(limit.tap, excursion((18, 10), (30, 20)))
    for index in range(10):
        feed.send(index)
    Alarm.objects.update(acknowledged_at=NOON, acknowledged_by=owner, state=AlarmState.ACKNOWLEDGED)
    for index in range(10, 30):
        feed.send(index)
    assert Alarm.objects.get().state == AlarmState.NORMAL


def test_limit_in_runs_only_is_suppressed_and_calls_nobody(owner):
    limit = make_limit(make_tap(), owner, on_delay_s=5.0, in_runs_only=True)
    Feed(limit.tap, excursion((18, 10))).send(np.arange(10))
    assert Alarm.objects.get().state == AlarmState.SUPPRESSED and not Message.objects.exists()


def test_in_a_declared_run_such_a_limit_calls_the_runs_people(owner):
    limit = make_limit(make_tap(), owner, on_delay_s=5.0, in_runs_only=True)
    make_run(limit.experiment, NOON, 14 * 3600, owner=make_person(Role.RESEARCHER, email="night@lab.example"))
    feed = Feed(limit.tap, excursion((18, 10)))
    for index in range(10):
        feed.send(index)
    assert Alarm.objects.get().state == AlarmState.UNACKNOWLEDGED
    assert Message.objects.get().recipients == ["night@lab.example"], "the run's owner first; the owner if nobody takes it"


def test_an_excursion_open_when_the_run_begins_is_heard_once(owner):
    limit = make_limit(make_tap(), owner, on_delay_s=5.0, in_runs_only=True)
    make_run(limit.experiment, NOON + timedelta(seconds=10))
    feed = Feed(limit.tap, excursion((18, 15)))
    for index in range(15):
        feed.send(index)
        assert Alarm.objects.filter(state=AlarmState.SUPPRESSED).exists() is (5 <= index < 10)
    assert Alarm.objects.get().state == AlarmState.UNACKNOWLEDGED and Message.objects.count() == 1


def test_a_run_on_other_taps_of_the_experiment_leaves_the_limit_suppressed(owner):
    limit = make_limit(make_tap(), owner, on_delay_s=5.0, in_runs_only=True)
    make_run(limit.experiment, NOON).taps.set([make_tap()])
    Feed(limit.tap, excursion((18, 10))).send(np.arange(10))
    assert Alarm.objects.get().state == AlarmState.SUPPRESSED and not Message.objects.exists()


def test_an_excursion_in_late_data_of_a_run_is_shown_and_calls_nobody(owner):
    limit = make_limit(make_tap(), owner, on_delay_s=5.0, off_delay_s=5.0, in_runs_only=True)
    make_run(limit.experiment, NOON, 60.0)
    feed = Feed(limit.tap, excursion((30, 10), (18, 10), (30, 200)))
    feed.send(np.arange(220), now_us=NOON_US + 3600 * S)
    alarm = Alarm.objects.get()
    assert (alarm.state, alarm.is_late, alarm.is_suppressed) == (AlarmState.NORMAL, True, False)
    assert not Message.objects.exists()


def test_newest_sample_is_by_data_time():
    tap = make_tap()
    feed = Feed(tap, excursion((30, 5), (25, 5)))
    feed.send(np.arange(5, 10))
    feed.send(np.arange(0, 5), now_us=int(feed.at_us[-1]))
    row = TapNow.objects.get(tap=tap)
    assert row.at_us == feed.at_us[-1]
    assert row.sample["er_db"] == pytest.approx(25.0) and row.sample["trust_by_quantity"]["er_db"]["trust"] == "trusted"
    assert row.sample["angle_deg"] == pytest.approx(np.degrees(2 * np.arctan(10 ** (-25 / 20))))


def test_dark_reading_is_null_beside_the_last_trusted_one():
    from analysis.record.calibrations import new_version

    tap = make_tap()
    new_version(tap, NOON - timedelta(days=1), {"floor1": 1e-9, "floor2": 1e-9})
    store_readings(tap, [NOON_US, NOON_US + S], port1=[1e-3, 0.0], port2=[1e-6, 0.0])
    process_touched(now_us=NOON_US + S)
    sample = TapNow.objects.get(tap=tap).sample
    assert sample["er_db"] is None and sample["power_w"] == 0.0
    assert sample["trust_by_quantity"]["er_db"]["codes"] == ["dark"]
    assert sample["last_trusted"]["er_db"]["value"] == pytest.approx(30.0)


def test_untrusted_reading_raises_its_own_alarm_and_never_an_er_alarm(owner):
    limit = make_limit(make_tap(), owner)
    feed = Feed(limit.tap, np.full(200, 10.0))
    columns = ports_of(feed.er_db)
    store_readings(limit.tap, feed.at_us, clipped=1.0, **columns)
    process_touched(now_us=int(feed.at_us[-1]) + 5 * S)
    alarm = Alarm.objects.get()
    assert alarm.kind == "untrusted" and "port saturated" in alarm.message
    assert Message.objects.count() == 1
    later = feed.at_us[-1] + np.arange(1, 30) * S
    store_readings(limit.tap, later, **{name: values[:29] for name, values in ports_of(np.full(200, 30.0)).items()})
    process_touched(now_us=int(later[-1]) + 5 * S)
    alarm.refresh_from_db()
    assert alarm.returned_at is not None and Alarm.objects.count() == 1


def test_limit_change_starts_a_new_fold_and_keeps_the_open_alarm(owner):
    limit = make_limit(make_tap(), owner, on_delay_s=5.0, off_delay_s=5.0)
    feed = Feed(limit.tap, excursion((18, 60), (18, 60)))
    for index in range(60):
        feed.send(index)
    set_limit(
        limit.experiment,
        limit.tap,
        "er_db",
        alarm=15.0,
        on_delay_s=5.0,
        off_delay_s=5.0,
        valid_from=NOON + timedelta(seconds=60),
        by=owner,
    )
    for index in range(60, 70):
        feed.send(index)
    feed.send(np.arange(70, 75))
    assert episodes(limit) == [(5.0, 5.0, 65.0, "alarm", 18.0)]


def test_stricter_limit_set_in_the_past_judges_what_was_read_since(owner):
    limit = make_limit(make_tap(), owner, alarm=15.0, on_delay_s=5.0, off_delay_s=5.0)
    feed = Feed(limit.tap, excursion((30, 60), (18, 60), (30, 60)))
    for batch in np.array_split(np.arange(180), 30):
        feed.send(batch)
    assert episodes(limit) == []
    set_limit(
        limit.experiment,
        limit.tap,
        "er_db",
        alarm=20.0,
        on_delay_s=5.0,
        off_delay_s=5.0,
        valid_from=NOON + timedelta(seconds=30),
        by=owner,
    )
    feed.finish()
    assert episodes(limit) == [(65.0, 65.0, 125.0, "alarm", 18.0)]
    assert Alarm.objects.get().is_late


def test_retired_limit_ends_its_alarm_and_judges_no_more(owner, monkeypatch):
    from labmon.experiments.actions import retire_limit

    limit = make_limit(make_tap(), owner, on_delay_s=5.0)
    feed = Feed(limit.tap, np.full(300, 18.0))
    for batch in np.array_split(np.arange(100), 10):
        feed.send(batch)
    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON + timedelta(seconds=100))
    retire_limit(limit, by=owner)
    for batch in np.array_split(np.arange(100, 300), 10):
        feed.send(batch)
    assert episodes(limit) == [(5.0, 5.0, 100.0, "alarm", 18.0)]


def test_first_limit_looks_back_a_day(owner, monkeypatch):
    """An excursion that is under way when its first limit is set is seen from its own beginning."""
    tap = make_tap()
    feed = Feed(tap, excursion((30, 100), (18, 500)))
    for batch in np.array_split(np.arange(500), 10):
        feed.send(batch)
    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON + timedelta(seconds=500))
    limit = set_limit(make_experiment(tap, owner=owner), tap, "er_db", alarm=20.0, by=owner).limit
    feed.send(np.arange(500, 600))
    assert episodes(limit) == [(160.0, 160.0, None, "alarm", 18.0)]
    assert Message.objects.count() == 1


def test_new_calibration_judges_the_past_again_and_calls_nobody(owner):
    from analysis.record.calibrations import new_version

    limit = make_limit(make_tap(), owner, on_delay_s=5.0, off_delay_s=5.0)
    feed = Feed(limit.tap, excursion((19, 100), (30, 300)))
    for batch in np.array_split(np.arange(400), 40):
        feed.send(batch)
    assert Alarm.objects.count() == 1
    mails = Message.objects.count()
    new_version(limit.tap, NOON - timedelta(days=1), {"gain_ratio": 0.5})
    feed.finish()
    assert Alarm.objects.get().is_withdrawn and Message.objects.count() == mails
    assert RollupDue.objects.filter(tap=limit.tap).exists()


def test_queries_do_not_grow_with_taps():
    counts = []
    for taps in (2, 20):
        for _ in range(taps):
            limit = make_limit(make_tap(), on_delay_s=0.0)
            store_readings(limit.tap, [NOON_US + S], **ports_of(np.array([19.0])))
        with CaptureQueriesContext(
            connection,
        ) as queries:
            process_touched(now_us=NOON_US + S)
        counts.append(len(queries))
    assert counts[0] == counts[1]


def test_climate_tap_has_no_optics_and_no_alarms():
    tap = make_tap(kind=TapKind.CLIMATE)
    make_experiment(tap)
    store_readings(tap, [NOON_US], temperature_c=21.5, humidity_pct=40.0)
    process_touched(now_us=NOON_US)
    sample = TapNow.objects.get(tap=tap).sample
    assert (sample["temperature_c"], sample["humidity_pct"], sample["er_db"]) == (21.5, 40.0, None)
    assert not Alarm.objects.exists()
