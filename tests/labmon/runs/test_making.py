"""Ledgers from stored readings: JOB 7a's ten hours through the real store, versions, edits, holes, workers that die."""

from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from analysis.judge.ledger_tap import LedgerClass
from analysis.record.calibrations import new_version
from ingest.models import ForgottenDay
from ingest.store.read import Found
from labmon.audit.models import AuditEntry
from labmon.errors import WriteError
from labmon.experiments.actions import set_limit
from labmon.runs import samples as samples_module
from labmon.runs.actions import plan_run
from labmon.runs.ledgers import Unusable, ask_due_ledgers, ask_ledger, interval_rows, ledgers_of, newest_ledger, stretches
from labmon.runs.making import LEFT_AFTER, make_waiting_ledgers
from labmon.runs.models import RunLedger
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_run, make_tap, store_readings

pytestmark = pytest.mark.django_db
HOUR, MINUTE, S = 3600, 60, 1_000_000
G, U, N, B = LedgerClass.GOOD, LedgerClass.UNTRUSTED, LedgerClass.NO_READING, LedgerClass.BELOW


@pytest.fixture(autouse=True)
def clock(monkeypatch):
    """Limits are set at noon; ledgers are asked for a day later."""
    now = {"at": NOON - timedelta(minutes=5)}
    monkeypatch.setattr("django.utils.timezone.now", lambda: now["at"])
    return lambda at: now.update(at=at)


def bench(clock, alarm=20.0, **tap_fields):
    tap = make_tap(**tap_fields)
    experiment = make_experiment(tap)
    set_limit(experiment, tap, "er_db", alarm=alarm, by=None)
    clock(NOON + timedelta(days=1))
    return tap, experiment


def send(tap, second, er_db, **columns):
    """Readings at these seconds after noon, 1 mW on the wanted port."""
    second = np.asarray(second)
    wanted = np.full(len(second), 1e-3)
    store_readings(
        tap, NOON_US + np.round(second * S).astype(np.int64), sequence=np.arange(len(second)), boot="b",
        port1=wanted, port2=wanted * 10 ** (-np.broadcast_to(er_db, second.shape) / 10), **columns,
    )


def made(run, **options):
    ask_ledger(run, **{"by": None} | options)
    make_waiting_ledgers()
    return newest_ledger(run)


def seconds_of_classes(ledger):
    return {G: ledger.good_s, B: ledger.below_s, U: ledger.untrusted_s, N: ledger.no_reading_s}


def ten_hours(clock):
    """JOB 7a: 10 h at 1 Hz, 20 min below, 30 min without readings, 10 min with a clipped port (saturated: untrusted)."""
    tap, experiment = bench(clock)
    second = np.delete(np.arange(10 * HOUR), np.arange(3 * HOUR, 3 * HOUR + 30 * MINUTE))
    er_db = np.where((second >= HOUR) & (second < HOUR + 20 * MINUTE), 19.0, 30.0)
    clipped = ((second >= 5 * HOUR) & (second < 5 * HOUR + 10 * MINUTE)).astype(float)
    send(tap, second, er_db, clipped=clipped)
    return tap, make_run(experiment, NOON, 10 * HOUR)


def test_ten_hours_of_the_job_paper_through_the_store(clock):
    """JOB 7a row 11, from stored readings: 9 h 00 good, 0:20 below, 0:30 no reading, 0:10 untrusted."""
    tap, run = ten_hours(clock)
    ledger = made(run)
    assert seconds_of_classes(ledger) == {G: 9 * HOUR, B: 20 * MINUTE, N: 30 * MINUTE, U: 10 * MINUTE}
    rows = interval_rows(ledger)
    assert [(row.klass, row.length_s) for row in rows] == [
        (G, HOUR), (B, 20 * MINUTE), (G, 100 * MINUTE), (N, 30 * MINUTE), (G, 90 * MINUTE), (U, 10 * MINUTE), (G, 290 * MINUTE)
    ]
    name = f"{tap.station.name}/{tap.name}"
    assert rows[1].reasons == ("Extinction ratio below its limit",) and rows[1].taps == (name,)
    assert rows[5].reasons == ("Port saturated",) and rows[0].reasons == () == rows[0].taps
    assert rows[3].from_at == NOON + timedelta(hours=3) and rows[3].until_at == NOON + timedelta(hours=3, minutes=30)
    figures = ledger.facts["taps"][0]
    assert figures["mean_er_db"] == pytest.approx(-10 * np.log10((1200 * 10**-1.9 + 32400 * 10**-3.0) / 33600))
    assert figures["least_er_db"] == pytest.approx(19.0) and figures["samples"] == 33_600
    (limit,) = ledger.facts["limits"]
    assert (limit["alarm"], limit["from_at"]) == (20.0, NOON.isoformat())


def test_stretches_of_any_length_give_the_same(clock, monkeypatch):
    _, run = ten_hours(clock)
    whole = stretches(made(run))
    monkeypatch.setattr(samples_module, "LONGEST_STRETCH_S", 1_000)
    cut = stretches(made(run, reason="again"))
    for name in ("first_s", "length_s", "klass", "why", "taps"):
        np.testing.assert_array_equal(getattr(whole, name), getattr(cut, name))


def test_what_comes_just_before_and_after_the_run_holds_into_it(clock):
    tap, experiment = bench(clock, interval_s=10.0)
    send(tap, [-5.0, 5.0, 15.0, 25.0, 35.0], [19.0, 30.0, 30.0, 30.0, 30.0])
    ledger = made(make_run(experiment, NOON, 60))
    assert [(row.klass, row.length_s) for row in interval_rows(ledger)] == [(B, 5), (G, 40), (N, 15)]
    other = made(make_run(experiment, NOON + timedelta(minutes=10), 60))
    assert seconds_of_classes(other) == {G: 0, B: 0, U: 0, N: 60}


def test_each_second_is_judged_by_the_limit_in_force(clock):
    tap, experiment = bench(clock)
    run = make_run(experiment, NOON, 100)
    clock(NOON + timedelta(seconds=40))
    set_limit(experiment, tap, "er_db", alarm=35.0, reason="stricter", by=make_person(username="ada"))
    clock(NOON + timedelta(days=1))
    send(tap, np.arange(100), 30.0)
    ledger = made(run)
    assert [(row.klass, row.length_s) for row in interval_rows(ledger)] == [(G, 40), (B, 60)]
    assert [(one["alarm"], one["set_by"], one["reason"]) for one in ledger.facts["limits"]] == [
        (20.0, None, ""), (35.0, "ada", "stricter")
    ]


def test_a_zero_entered_later_makes_another_version_and_the_old_one_stays(clock):
    """JOB 13: 1 uW on the dark port under 1 mW is 30 dB; with a zero of -9.1 uW it is 19.96 dB, below 20."""
    tap, experiment = bench(clock)
    send(tap, np.arange(60), 30.0)
    run = make_run(experiment, NOON, 60)
    first = made(run)
    new_version(tap, NOON - timedelta(hours=1), {"zero2": -9.1e-6}, by="ada")
    second = made(run, by=make_person(), reason="zero was wrong")
    assert (first.good_s, second.good_s, second.below_s) == (60, 0, 60)
    assert RunLedger.objects.get(pk=first.pk).good_s == 60
    assert [(one.number, one.reason) for one in ledgers_of(run)] == [(2, "zero was wrong"), (1, "")]
    assert second.facts["taps"][0]["calibrations"][0]["zero2"] == -9.1e-6 and not first.facts["taps"][0]["calibrations"]
    assert AuditEntry.objects.filter(action="make ledger", reason="zero was wrong").exists()


def test_edits_take_from_good_and_may_ask_for_another_level(clock):
    tap, experiment = bench(clock)
    send(tap, np.arange(60), 30.0)
    run = make_run(experiment, NOON, 60)
    made(run)
    span = Unusable(NOON + timedelta(seconds=10), NOON + timedelta(seconds=25), "shutter shut")
    edited = made(run, reason="shutter", unusable=[span])
    assert (edited.good_s, edited.untrusted_s) == (45, 15)
    assert interval_rows(edited)[1].reasons == ("Declared unusable",)
    limit_id = edited.facts["limits"][0]["limit"]
    stricter = made(run, reason="what at 31 dB", levels={limit_id: 31.0})
    assert stricter.below_s == 60 and (stricter.facts["limits"][0]["alarm"], stricter.facts["limits"][0]["used"]) == (20.0, 31.0)


@pytest.mark.parametrize(
    ("field", "options"),
    [
        ("reason", {"reason": " "}),
        ("unusable", {"unusable": [Unusable(NOON, NOON + timedelta(hours=2), "x")]}),
        ("unusable", {"unusable": [Unusable(NOON, NOON + timedelta(seconds=5), " ")]}),
        ("levels", {"levels": {0: 20.0}}),
    ],
)
def test_edits_that_cannot_be_meant(clock, field, options):
    _, experiment = bench(clock)
    run = make_run(experiment, NOON, 60)
    made(run)
    with pytest.raises(WriteError) as fault:
        ask_ledger(run, **{"by": None, "reason": "why"} | options)
    assert fault.value.field == field


def test_a_run_has_its_first_ledger_a_little_after_its_end_and_one_only(clock):
    _, experiment = bench(clock)
    run = make_run(experiment, NOON, 60)
    make_run(experiment, NOON + timedelta(hours=1), 60, cancelled_at=NOON)
    assert ask_due_ledgers(NOON + timedelta(seconds=179)) == []
    assert ask_due_ledgers(NOON + timedelta(seconds=180)) == [run.pk] and ask_due_ledgers(NOON + timedelta(days=9)) == []
    assert len(make_waiting_ledgers()) == 1 and newest_ledger(run).no_reading_s == 60


def test_no_ledger_before_the_end_and_none_beside_one_that_is_being_made(clock):
    _, experiment = bench(clock)
    running = make_run(experiment, NOON + timedelta(days=1) - timedelta(minutes=1), 7200)
    with pytest.raises(WriteError, match="has not ended"):
        ask_ledger(running, by=None)
    over = make_run(experiment, NOON, 60)
    ask_ledger(over, by=None)
    with pytest.raises(WriteError, match="being made"):
        ask_ledger(over, by=None, reason="again")


def test_a_version_left_by_a_dead_worker_is_taken_up_anew(clock):
    _, experiment = bench(clock)
    ledger = ask_ledger(make_run(experiment, NOON, 60), by=None)
    RunLedger.objects.update(beat_at=NOON + timedelta(days=1))
    assert make_waiting_ledgers() == []
    clock(NOON + timedelta(days=1, seconds=1) + LEFT_AFTER)
    assert make_waiting_ledgers() == [ledger.pk]


def test_a_fault_is_kept_in_words_and_leaves_no_half_ledger(clock, monkeypatch):
    _, experiment = bench(clock)
    run = make_run(experiment, NOON, 60)

    def broken(*_: object) -> Found:
        raise ValueError("no such disk")

    monkeypatch.setattr(samples_module, "find_readings", broken)
    ask_ledger(run, by=None)
    with pytest.raises(ValueError, match="no such disk"):
        make_waiting_ledgers()
    ledger = RunLedger.objects.get()
    assert ledger.fault == "ValueError: no such disk" and ledger.made_at is None and newest_ledger(run) is None
    assert make_waiting_ledgers() == []
    monkeypatch.undo()


def test_readings_no_longer_kept_are_no_reading_and_say_so(clock):
    tap, experiment = bench(clock)
    day_us = NOON_US // (86_400 * S) * 86_400 * S
    ForgottenDay.objects.create(tap=tap, day_us=day_us, rule="30 days", count=1, size=1, forgotten_us=0)
    ledger = made(make_run(experiment, NOON, 60))
    assert ledger.no_reading_s == 60 and interval_rows(ledger)[0].reasons == ("Raw readings no longer kept",)


def test_several_taps_are_accounted_for_together(clock):
    one, other = make_tap(), make_tap()
    experiment = make_experiment(one, other)
    for tap in (one, other):
        set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    clock(NOON + timedelta(days=1))
    send(one, np.arange(60), 30.0)
    send(other, np.arange(30), np.where(np.arange(30) < 10, 19.0, 30.0))
    ledger = made(make_run(experiment, NOON, 60))
    assert seconds_of_classes(ledger) == {B: 10, G: 20, N: 30, U: 0}
    assert interval_rows(ledger)[2].taps == (f"{other.station.name}/{other.name}",)


def test_a_night_in_which_the_clocks_go_back_has_its_true_length(clock):
    """Berlin, 26 Oct 2031: from 20:00 CEST to 08:00 CET are 13 hours, though the clocks show 12; the ledger counts seconds."""
    zone = ZoneInfo("Europe/Berlin")
    start, end = datetime(2031, 10, 25, 20, tzinfo=zone), datetime(2031, 10, 26, 8, tzinfo=zone)
    _, experiment = bench(clock)
    clock(start - timedelta(hours=1))
    run = plan_run(experiment, by=None, name="autumn", starts_at=start, ends_at=end)
    clock(end + timedelta(days=1))
    ledger = made(run)
    assert ledger.length_s == 13 * HOUR == sum(seconds_of_classes(ledger).values())
