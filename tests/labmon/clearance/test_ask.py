"""Clearances from stored readings, counted by hand (JOB 7a, CONTRACT 5)."""

import math

import numpy as np
import pytest

from analysis.outlook.comparable import SetAside, Widening
from analysis.outlook.verdict import Reason, Verdict
from analysis.quantities import angle_rad_from_er_db
from analysis.record.calibrations import new_version
from ingest.models import TapKind
from ingest.times import SECOND_US, at_of
from labmon.alarms.models import AlarmHold, HoldKind
from labmon.clearance.ask import checked_question, clearance_of
from labmon.clearance.words import reasons, remedies, sentence, times_words
from labmon.errors import WriteError
from labmon.experiments.actions import set_limit
from labmon.logbook.models import ChangeKind, ConfigurationChange, LogEntry
from labmon.pipeline.catch_up import catch_up
from tests.factories import make_experiment, make_tap, store_alarm, store_readings
from tests.labmon.clearance.bench import DAY_US, HOUR_US, MONDAY_US, NIGHT_S, STEP_S, bench_with, er_of, nights_of

pytestmark = pytest.mark.django_db


def asked(experiment, now_us, start_us=None, length_s=NIGHT_S, allowed_s=0.0):
    return clearance_of(experiment, checked_question(now_us if start_us is None else start_us, length_s, allowed_s, now_us))


def said(answer):
    return sentence(answer).replace("\N{NO-BREAK SPACE}", " ")


def test_fourteen_nights_none_fails():
    """Asked on a Friday 18 days on: the 14 working nights Monday to Thursday of the third week; weekends are another kind."""
    experiment, _, now_us = bench_with(nights_of(21))
    answer = asked(experiment, MONDAY_US + 18 * DAY_US)
    assert said(answer) == "Cleared: 14 of 14 such nights held; failure up to 19 %."
    assert answer.together.verdict is Verdict.CLEARED and answer.together.reasons == ()
    assert answer.limits[0].clearance.widened == () and not remedies(answer)
    assert len(answer.limits[0].courses) == 14 and math.degrees(answer.limits[0].now_rad) == pytest.approx(3.0)
    assert said(asked(experiment, now_us, start_us=MONDAY_US + 21 * DAY_US)) == (
        "Cleared: 15 of 15 such nights held; failure up to 18 %.")


def test_three_nights_are_not_enough():
    experiment, _, now_us = bench_with(nights_of(3))
    answer = asked(experiment, now_us, start_us=MONDAY_US + 3 * DAY_US)
    assert said(answer) == "Not enough evidence: 3 of 3 such nights held; failure up to 63 %."
    assert answer.together.reasons == (Reason.FEW_WINDOWS,)
    assert remedies(answer) == ["11 more comparable nights without a failure would clear it."]


def test_a_configuration_change_this_morning():
    experiment, tap, now_us = bench_with(nights_of(21))
    ConfigurationChange.objects.create(station=tap.station, at=at_of(now_us - 9 * HOUR_US), kind=ChangeKind.FIBRE)
    answer = asked(experiment, now_us, start_us=MONDAY_US + 21 * DAY_US)
    assert said(answer) == ("Not enough evidence: the configuration changed at 2024-03-25 10:59 UTC, and what was before does "
                            "not count; no such night to count.")
    assert set(answer.together.reasons) == {Reason.FEW_WINDOWS, Reason.CHANGED}


def test_a_change_of_gain_cuts_history_and_a_new_zero_does_not():
    experiment, tap, now_us = bench_with(nights_of(21))
    new_version(tap, at_of(MONDAY_US), {"zero2": 0.0})
    new_version(tap, at_of(MONDAY_US + 3 * DAY_US), {"zero2": 1e-12})
    assert asked(experiment, now_us, start_us=MONDAY_US + 21 * DAY_US).together.count == 15
    new_version(tap, at_of(MONDAY_US + 16 * DAY_US), {"gain_ratio": 1.01})
    catch_up(now_us + 2 * DAY_US)
    answer = asked(experiment, now_us, start_us=MONDAY_US + 21 * DAY_US)
    assert answer.together.count == 5 and Reason.CHANGED in answer.together.reasons      # Wednesday to Sunday, pooled


def test_thirteen_nights_pooled_are_thin():
    """JOB 8: 13 of 13, weekdays and weekends pooled → likely but thin, failure up to 21 %; 96 h: three windows."""
    experiment, _, now_us = bench_with(nights_of(13))
    answer = asked(experiment, now_us, start_us=MONDAY_US + 13 * DAY_US)
    assert said(answer) == "Likely but thin: 13 of 13 such nights held; failure up to 21 %."
    assert answer.limits[0].clearance.widened == (Widening.DAYS,)
    longer = asked(experiment, now_us, start_us=MONDAY_US + 13 * DAY_US, length_s=96 * 3600.0)
    assert said(longer) == "Not enough evidence: 3 of 3 such windows held; failure up to 63 %."


def test_nights_that_fail_are_named_with_what_is_known():
    """From 3°, 8.5° more crosses 11.42° (20 dB) at 22:00 on three of 14 working nights; one had a cause, one an entry."""
    experiment, tap, now_us = bench_with(nights_of(21, {1: 8.5, 3: 8.5, 8: 8.5, 9: 8.3}))
    at_22 = [at_of(MONDAY_US + day * DAY_US + 2 * HOUR_US) for day in (1, 3)]
    store_alarm(kind="limit", tap=tap, experiment=experiment, raised_at=at_22[0], returned_at=at_of(MONDAY_US + 2 * DAY_US),
                cause="thermal", message="ER low")
    LogEntry.objects.create(station=tap.station, at=at_22[1], text="door left open", tag="note")
    answer = asked(experiment, MONDAY_US + 18 * DAY_US)
    assert said(answer) == "Not cleared: 11 of 14 such nights held; failure up to 47 %."
    failed = answer.limits[0].clearance.failed
    assert [(one.start_us - MONDAY_US) // DAY_US for one in failed] == [1, 3, 8]
    assert [one.labels for one in failed] == [("thermal",), ("note: door left open",), ()]
    assert all(one.crossed_at_us == one.start_us + 2 * HOUR_US and one.beyond_s == 300.0 for one in failed)
    assert math.degrees(failed[0].worst_rad) == pytest.approx(11.5)
    assert times_words(answer) == "One in ten of the replays reached the limit by 2 h 00; half of them did not within the run."
    assert "A run of at most 2 h 00 would be cleared by the same past." in remedies(answer)
    assert asked(experiment, MONDAY_US + 18 * DAY_US, allowed_s=300.0).together.verdict is Verdict.CLEARED
    assert sum(course.has_failed for course in answer.limits[0].courses) == 3


def test_where_somebody_aligned_the_story_ends():
    """A night cut by a shelving of all the tap's alarms counts only if it had failed before."""
    experiment, tap, now_us = bench_with(nights_of(21, {3: 9.0}))
    for day, hours in ((2, 5), (3, 5)):
        at = at_of(MONDAY_US + day * DAY_US + hours * HOUR_US)
        AlarmHold.objects.create(kind=HoldKind.SHELVED, tap=tap, reason="aligning", begun_at=at, until=at_of(
            MONDAY_US + day * DAY_US + (hours + 1) * HOUR_US), ended_at=at)
    answer = asked(experiment, MONDAY_US + 18 * DAY_US)
    assert (answer.together.held, answer.together.count) == (12, 13)
    aside = dict(answer.limits[0].clearance.set_aside)
    assert aside[MONDAY_US + 2 * DAY_US] is SetAside.REALIGNED


def test_a_reading_that_is_not_of_now_is_no_start():
    experiment, _, now_us = bench_with(nights_of(18))
    answer = asked(experiment, now_us + 2 * HOUR_US)
    assert answer.together.verdict is Verdict.NOT_ENOUGH and Reason.READING_UNTRUSTED in answer.together.reasons
    assert said(answer).startswith("Not enough evidence: the reading now is not trusted (north-1/eom-in: no reading now); ")


def test_an_open_alarm_or_a_state_beyond_the_limit_does_not_clear():
    angle = nights_of(18)
    angle[-20:] = 12.0
    experiment, tap, now_us = bench_with(angle)
    answer = asked(experiment, now_us)
    assert answer.together.verdict is Verdict.NOT_CLEARED and Reason.BEYOND_NOW in answer.together.reasons
    store_alarm(kind="untrusted", tap=tap, raised_at=at_of(now_us - HOUR_US), cause="laser hops", message="Not trusted")
    answer = asked(experiment, MONDAY_US + 17 * DAY_US + 23 * HOUR_US)
    assert answer.open_causes == ("Not trusted (cause: laser hops)",)
    assert "Something is still open (Not trusted (cause: laser hops))." in reasons(answer)


def test_what_would_have_been_said_then():
    """Asked today about a start in the past: nothing later than that start is used."""
    experiment, _, now_us = bench_with(nights_of(21, {15: 9.0}))
    then = MONDAY_US + 14 * DAY_US
    assert said(asked(experiment, now_us, start_us=then)) == said(asked(experiment, then))
    assert asked(experiment, now_us, start_us=then).together.held == asked(experiment, then).together.count == 10


def test_a_run_must_hold_for_every_limit():
    experiment, tap, now_us = bench_with(nights_of(21, {3: 8.5}))
    other = make_tap(tap.station, "second", interval_s=float(STEP_S))
    experiment.taps.add(other)
    set_limit(experiment, other, "angle_deg", alarm=11.4, by=None, valid_from=at_of(MONDAY_US))
    at_us = MONDAY_US + STEP_S * SECOND_US * np.arange(21 * 2880)
    store_readings(other, at_us, port1=1e-3, port2=1e-3 * 10 ** (-er_of(nights_of(21, {7: 8.5})) / 10), boot="c",
                   sequence=np.arange(len(at_us)))
    catch_up(now_us + 2 * DAY_US)
    answer = asked(experiment, MONDAY_US + 18 * DAY_US)
    assert [one.clearance.held for one in answer.limits] == [13, 13]
    assert (answer.together.held, answer.together.count) == (12, 14)


@pytest.mark.parametrize(("today_deg", "held", "worst_deg"), [(8.0, 0, 14.0), (-8.0, 14, 8.0)])
def test_stokes_turns_todays_state(today_deg, held, worst_deg):
    """Nights that move by 6° towards +S2 and back: from 8° off towards +S2 they fail a limit of 11.42°, from -S2 they hold."""
    tap = make_tap(kind=TapKind.STOKES, interval_s=float(STEP_S))
    experiment = make_experiment(tap)
    set_limit(experiment, tap, "angle_deg", alarm=11.42, by=None, valid_from=at_of(MONDAY_US))
    new_version(tap, at_of(MONDAY_US - DAY_US), {"wanted_state": [1.0, 0.0, 0.0]})
    angle = np.zeros(18 * 2880)
    for day in range(18):
        angle[day * 2880 + 240:day * 2880 + 300] = np.radians(6.0)
    angle[-10:] = np.radians(today_deg)
    at_us = MONDAY_US + STEP_S * SECOND_US * np.arange(len(angle))
    store_readings(tap, at_us, s0=1e-3, s1=1e-3 * np.cos(angle), s2=1e-3 * np.sin(angle), s3=0.0, boot="b",
                   sequence=np.arange(len(angle)))
    catch_up(int(at_us[-1]) + 3 * DAY_US)
    answer = asked(experiment, int(at_us[-1]) + SECOND_US)
    assert (answer.together.held, answer.together.count) == (held, 14)
    assert math.degrees(answer.limits[0].now_rad) == pytest.approx(8.0, abs=1e-6)
    drawn = np.degrees(np.nanmax([course.angle_rad for course in answer.limits[0].courses]))
    assert drawn == pytest.approx(worst_deg, abs=1e-6)


def test_no_limit_and_no_reading():
    tap = make_tap()
    experiment = make_experiment(tap)
    answer = asked(experiment, MONDAY_US)
    assert answer.together is None and said(answer).startswith("Not enough evidence: no limit on the extinction ratio")
    assert reasons(answer) == ["Set a limit on the extinction ratio or the angle first."]
    set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    answer = asked(experiment, MONDAY_US)
    assert answer.together.verdict is Verdict.NOT_ENOUGH and answer.together.count == 0


@pytest.mark.parametrize(("start_us", "length_s", "allowed_s", "field"), [
    (0, 10.0, 0.0, "length_s"), (0, 32 * 86_400.0, 0.0, "length_s"), (0, 3600.0, -1.0, "allowed_s"),
    (0, 3600.0, 3600.0, "allowed_s"), (401 * DAY_US, 3600.0, 0.0, "start"), (0, math.nan, 0.0, "length_s")])
def test_questions_are_bounded(start_us, length_s, allowed_s, field):
    with pytest.raises(WriteError) as refused:
        checked_question(start_us, length_s, allowed_s, 0)
    assert refused.value.field == field


def test_a_steady_number_of_queries(django_assert_num_queries):
    """Ten more days cost no more queries."""
    experiment, _, now_us = bench_with(nights_of(3))
    from django.db import connection
    from django.test.utils import CaptureQueriesContext

    with CaptureQueriesContext(connection) as few:
        asked(experiment, now_us)
    other, _, now_us = bench_with(nights_of(13), name="north-2")
    with django_assert_num_queries(len(few)):
        asked(other, now_us)


def test_limits_are_those_of_then():
    """A limit tightened later does not change what is said of an earlier start."""
    experiment, tap, now_us = bench_with(nights_of(18))
    set_limit(experiment, tap, "er_db", alarm=35.0, by=None)
    answer = asked(experiment, now_us)
    assert answer.limits[0].asked.alarm == 20.0
    assert answer.limits[0].asked.limit_rad == pytest.approx(float(angle_rad_from_er_db(20.0)))
