"""Walking forward: counted by hand, blind to the future, and better than the rules of thumb on an invented lab."""

import numpy as np
import pytest

from analysis.outlook.backtest import summed_up, walk_forward_angles, walk_forward_sops
from analysis.outlook.verdict import Reason, Verdict
from analysis.outlook.window import LabelledSpan
from analysis.quantities import angle_between_rad, angle_rad_from_er_db
from tests.analysis.outlook.invented import bench_sop, nights
from tests.analysis.outlook.nights import DAY_US, START_US, bumped, calm, minutes_us

LIMIT_RAD = float(angle_rad_from_er_db(20.0))
WANTED = np.array([1.0, 0.0, 0.0])


def fortnight():
    """14 working nights at 3°; nights 10 and 12 rise by 9° (12° > 11.42°) at minute 90."""
    return [bumped(day, 9.0, 90, 4, is_working_day=True, labels=(LabelledSpan(
        start_us=int(minutes_us(day)[80]), end_us=int(minutes_us(day)[95]), label="touched"),)) if day in (10, 12)
        else calm(day, is_working_day=True) for day in range(14)]


def test_recorded_fortnight_by_hand():
    """Nights 7 to 13 are told (7 earlier ones are needed). Said 1, 1, 1, 1 (night 10 fails), 10/11, 11/12 (fails), 11/13."""
    rows = walk_forward_angles(fortnight(), LIMIT_RAD)
    told = [row for row in rows if row.said.verdict is not Verdict.NOT_ENOUGH]
    np.testing.assert_allclose([row.said.share for row in told], [1, 1, 1, 1, 10 / 11, 11 / 12, 11 / 13])
    assert [row.has_held for row in told] == [True, True, True, False, True, False, True]
    test = summed_up(rows)
    assert (test.windows, test.not_told, test.cleared) == (7, 6, 0) and test.base_share == pytest.approx(5 / 7)
    by_hand = (0 + 0 + 0 + 1 + (1 / 11) ** 2 + (11 / 12) ** 2 + (2 / 13) ** 2) / 7
    assert test.replay == pytest.approx(by_hand)
    assert test.margin == pytest.approx(2 / 7)                  # 3° is 31.6 dB: always "go"
    past = (0 + 0 + 0 + 1 + (1 / 11) ** 2 + (11 / 12) ** 2 + (2 / 13) ** 2) / 7
    assert test.past == pytest.approx(past)
    assert [(row.count, row.came_true) for row in test.table] == [(1, 1), (2, 1), (4, 3)]
    failed = next(row for row in told if not row.has_held)
    assert failed.failed_at_us == minutes_us(10)[90] and failed.labels == ("touched",)


def test_wrong_clearances_are_listed():
    windows = [calm(day, is_working_day=True) for day in range(14)] + [bumped(14, 9.0, 90, 4, is_working_day=True)]
    test = summed_up(walk_forward_angles(windows, LIMIT_RAD))
    assert (test.cleared, test.cleared_held) == (1, 0) and [row.start_us for row in test.wrong] == [windows[14].start_us]


def test_what_comes_later_changes_nothing():
    windows = fortnight()
    whole = walk_forward_angles(windows, LIMIT_RAD)
    part = walk_forward_angles(windows[:11], LIMIT_RAD)
    assert repr(whole[:len(part)]) == repr(part) and len(part) == 10


def test_changes_cut_history_from_then_on():
    rows = walk_forward_angles(fortnight(), LIMIT_RAD, changed_at_us=[START_US + 5 * DAY_US - 1])
    assert [row.said.count for row in rows] == [1, 2, 3, 4, 0, 1, 2, 3, 4, 5, 6, 7, 8]


def test_nights_that_begin_beyond_or_at_the_floor():
    """A bound within the limit is asked about as if the angle were as large; one beyond the limit cannot be asked about."""
    windows = [*fortnight(), calm(14, angle_deg=12.0, is_working_day=True),
               calm(15, is_working_day=True, is_upper_bound=np.ones(720, bool)),
               calm(16, angle_deg=12.0, is_working_day=True, is_upper_bound=np.ones(720, bool))]
    rows = walk_forward_angles(windows, LIMIT_RAD)
    assert windows[14].start_us not in {row.start_us for row in rows}
    assert [row.start_us for row in rows[-2:]] == [windows[15].start_us, windows[16].start_us]
    assert rows[-2].said.verdict is Verdict.NOT_CLEARED and rows[-2].said.count == 15
    assert rows[-1].said.verdict is Verdict.NOT_ENOUGH and Reason.AT_FLOOR in rows[-1].said.reasons


def test_what_is_told_sums_up_alike_and_the_rules_are_shown_beside():
    """The naive rules of the fortnight by hand: "3 dB above" goes for all 7 (5 held), 90 % of the past for 6 (4 held)."""
    rows = walk_forward_angles(fortnight(), LIMIT_RAD)
    test = summed_up(rows)
    assert repr(summed_up([row.told() for row in rows])) == repr(test)
    assert (test.margin_rule.cleared, test.margin_rule.cleared_held) == (7, 5)
    assert (test.past_rule.cleared, test.past_rule.cleared_held) == (6, 4)
    assert test.margin_rule.parts.score == test.margin and test.past_rule.parts.score == test.past


def test_nothing_to_walk():
    assert walk_forward_angles([], LIMIT_RAD) == ()
    empty = summed_up(())
    assert empty.windows == 0 and np.isnan(empty.replay) and empty.table == ()


def lab_rows(benches: int, days: int, seed: int):
    rng = np.random.default_rng(seed)
    by_sop, by_angle = [], []
    for _ in range(benches):
        sop = bench_sop(rng, days, LIMIT_RAD)
        by_sop += walk_forward_sops(nights(sop, sop), LIMIT_RAD, wanted=WANTED)
        by_angle += walk_forward_angles(nights(sop, angle_between_rad(sop, WANTED)), LIMIT_RAD)
    return summed_up(by_sop), summed_up(by_angle)


@pytest.mark.slow
def test_replay_beats_the_rules_of_thumb_in_an_invented_lab():
    """60 benches, 40 nights: Stokes before two-port before the past share before "3 dB above", by the Brier score.

    What was cleared held in at least 95 % of cases, though a bound of 20 % on failure is all that is promised.
    """
    by_sop, by_angle = lab_rows(60, 41, 5)
    assert by_sop.windows > 1000
    assert by_sop.replay < by_angle.replay < by_sop.past < by_sop.margin
    for test in (by_sop, by_angle):
        assert test.cleared > 200 and test.cleared_held / test.cleared >= 0.95
    uncertainty = by_sop.base_share * (1 - by_sop.base_share)
    assert by_sop.replay < 0.75 * uncertainty and by_sop.parts.skill > 0.25


@pytest.mark.slow
def test_the_ranking_of_the_job_paper_on_its_300_benches():
    """JOB 4's table, with its own seed and size: 300 benches, 45 days (its own simulation: Brier 0.101 Stokes, 0.113 two-port,
    0.168 own past rate, 0.186 "3 dB above"; cleared nights held 0.98 to 0.99). Here the benches live on the sphere and windows
    are compared as the lab does; the order and the shares are the claim, not the digits.
    """
    by_sop, by_angle = lab_rows(300, 45, 5)
    assert by_sop.windows > 7000
    assert by_sop.replay < by_angle.replay < by_sop.past < by_sop.margin
    for test in (by_sop, by_angle):
        assert test.cleared_held / test.cleared >= 0.95 > test.margin_rule.cleared_held / test.margin_rule.cleared
    told_high = next(row for row in reversed(by_sop.table) if row.said > 0.9)
    assert told_high.came_out > 0.95


def test_replay_beats_them_in_a_small_one():
    """12 benches: the order of the best and the worst is already there."""
    by_sop, by_angle = lab_rows(12, 31, 8)
    assert by_sop.windows > 100 and max(by_sop.replay, by_angle.replay) < min(by_sop.past, by_sop.margin)
