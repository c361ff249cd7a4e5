"""A tap's seconds: hand-counted classes, and a rule-by-rule reference in plain Python."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.ledger import joined
from analysis.judge.ledger_tap import LedgerClass, LedgerReason, Ruling, TapFold, fold_tap
from analysis.judge.rule import Quantity
from analysis.judge.seconds import Status, plain_samples_of, statuses
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import TrustContext, reduce_tap
from analysis.reduce.trust import Reason
from tests.analysis.judge.samples import ANGLE, ER, SECOND_US, reduced_er
from tests.strategies import two_port_samples

G, U, N, B = LedgerClass.GOOD, LedgerClass.UNTRUSTED, LedgerClass.NO_READING, LedgerClass.BELOW
ALWAYS = 1 << 60


def er_limit(alarm=20.0, from_s=0, until_s=1 << 40):
    return Ruling(ER, alarm, from_s * SECOND_US, until_s * SECOND_US)


def seconds_of_run(samples, length_s, *, rulings=None, from_s=0, **options):
    rulings = [er_limit()] if rulings is None else rulings
    return fold_tap(TapFold(), samples, rulings, from_s * SECOND_US, (from_s + length_s) * SECOND_US, **options)[1]


def test_each_class_of_a_second():
    """30 dB, 19 dB, an untrusted 30 dB, nothing; limit 20 dB, 1 Hz."""
    found = seconds_of_run(reduced_er([30.0, 19.0, 30.0], untrusted=[2]), 5, interval_s=1.0)
    assert found.klass.tolist() == [G, B, U, N, N]
    assert found.why.tolist() == [0, LedgerReason.ER, Reason.TWO_DEVICES, 0, 0]
    assert not found.is_doubtful.any()


@pytest.mark.parametrize(
    ("er_db", "untrusted", "expected"),
    [([30, 19, 30], [], B), ([30, 19, 30], [1], G), ([30, 30, 30], [0, 1], G), ([19, 30, 30], [0, 1, 2], U)],
)
def test_of_a_seconds_samples_one_below_decides_then_one_judged(er_db, untrusted, expected):
    samples = reduced_er(er_db, at_s=[0.1, 0.4, 0.8], untrusted=untrusted)
    assert seconds_of_run(samples, 1).klass.tolist() == [expected]


def test_at_the_limit_is_good():
    samples = reduced_er([20.0])
    assert seconds_of_run(samples, 1, rulings=[er_limit(float(samples.er_db[0]))]).klass.tolist() == [G]


def test_slow_samples_hold_until_the_next_of_at_most_three_intervals():
    """Every 5 s; 10 s between two is bridged, 16 s is not: the sample before stands for its own 5 s."""
    found = seconds_of_run(reduced_er([30, 19, 30, 30, 30], at_s=[0, 5, 10, 20, 36]), 45, interval_s=5.0)
    assert found.klass.tolist() == [G] * 5 + [B] * 5 + [G] * 15 + [N] * 11 + [G] * 5 + [N] * 4


def test_a_gap_of_seconds_is_a_gap_of_as_many_seconds():
    at_s = np.delete(np.arange(100), np.arange(40, 70))
    assert seconds_of_run(reduced_er(np.full(70, 30.0), at_s=at_s), 100).klass.tolist() == [G] * 40 + [N] * 30 + [G] * 30


def test_jittering_seconds_are_bridged():
    at_s = [0.95, 2.05, 3.0, 3.98, 5.03]
    assert seconds_of_run(reduced_er(np.full(5, 30.0), at_s=at_s), 6, interval_s=1.0).klass.tolist() == [G] * 6


def test_what_comes_after_the_span_decides_whether_its_last_sample_holds():
    samples = reduced_er([30.0], at_s=[0.0])
    for next_s, expected in ((3.0, [G] * 3), (3.1, [G, N, N]), (None, [G, N, N])):
        next_at_us = None if next_s is None else round(next_s * SECOND_US)
        assert seconds_of_run(samples, 3, next_at_us=next_at_us, interval_s=1.0).klass.tolist() == expected


def test_the_limit_of_each_second_decides():
    rulings = [er_limit(20.0, 0, 2), er_limit(35.0, 2, 4)]
    found = seconds_of_run(reduced_er(np.full(6, 30.0)), 6, rulings=rulings)
    assert found.klass.tolist() == [G, G, B, B, U, U] and found.why[4:].tolist() == [LedgerReason.NO_LIMIT] * 2


def test_two_limits_of_one_tap_the_worse_stands():
    """30 dB is 3.62 degrees: an angle limit of 3 is passed, one of 4 is not."""
    samples = reduced_er([30.0, 30.0])
    angle = Ruling(ANGLE, 3.0, 0, SECOND_US), Ruling(ANGLE, 4.0, SECOND_US, ALWAYS)
    found = seconds_of_run(samples, 2, rulings=[er_limit(), *angle])
    assert found.klass.tolist() == [B, G] and found.why[0] == LedgerReason.ANGLE
    derived = Ruling(Quantity.TRUSTED_SHARE, 0.9, 0, ALWAYS)
    assert seconds_of_run(samples, 2, rulings=[er_limit(), derived]).klass.tolist() == [G, G]


def test_doubtful_seconds_are_good_and_marked():
    marks = np.array([0, int(Reason.OLD_ZERO)], np.uint32)
    columns = {"port1": np.full(2, 1e-3), "port2": np.full(2, 1e-6)}
    at_us = np.array([0, SECOND_US])
    samples = reduce_tap("two-port", "W", at_us, columns, TapCalibration(), trust_context=TrustContext(marks=marks))
    found = seconds_of_run(samples, 2)
    assert found.klass.tolist() == [G, G] and found.is_doubtful.tolist() == [False, True]
    assert found.why.tolist() == [0, Reason.OLD_ZERO]


def test_at_floor_with_a_bound_below_the_limit_nobody_can_tell():
    """1 mW over a 1 nW floor is at least 57.1 dB: under a limit of 60 dB doubtful, never below (contract: undecided)."""
    columns = {"port1": np.array([1e-3]), "port2": np.zeros(1)}
    samples = reduce_tap("two-port", "W", np.zeros(1, np.int64), columns, TapCalibration(floor2=1e-9))
    for alarm, is_doubtful in ((50.0, False), (60.0, True)):
        found = seconds_of_run(samples, 1, rulings=[er_limit(alarm)])
        assert found.klass.tolist() == [G] and found.is_doubtful.tolist() == [is_doubtful]
        assert bool(found.why[0] & Reason.UNDECIDED) is is_doubtful


def test_figures_come_from_the_judged_samples():
    """Two samples of 20 and 40 dB in a second: 22.97 dB (JOB 7a); an untrusted one of 10 dB does not count."""
    found = seconds_of_run(reduced_er([20.0, 40.0, 10.0], at_s=[0.1, 0.5, 0.7], untrusted=[2]), 1)
    np.testing.assert_allclose(found.er_db, [22.97], atol=0.005)
    np.testing.assert_allclose(found.least_er_db, [20.0])
    assert found.samples == 2 and found.other_power / found.wanted_power == pytest.approx((1e-2 + 1e-4) / 2)


def test_spans_are_whole_seconds():
    with pytest.raises(ValueError, match="whole seconds"):
        fold_tap(TapFold(), reduced_er([]), [], 1, SECOND_US)


def by_hand(samples, rulings, from_s, length_s, interval_s):
    """CONTRACT 5 "Ledger second", second by second and sample by sample, ER limits only."""
    at_s = (samples.at_us / SECOND_US).tolist()
    found = []
    for second in range(from_s, from_s + length_s):
        inside = [index for index, at in enumerate(at_s) if int(at // 1) == second]
        if not inside:
            before = [index for index, at in enumerate(at_s) if at < second]
            if before:
                last = before[-1]
                following = at_s[last + 1] if last + 1 < len(at_s) else float("inf")
                near = following - at_s[last] <= 3.0 * interval_s
                if (following if near else at_s[last] + interval_s) >= second + 1:
                    inside = [last]
        level = next((r.alarm for r in rulings if r.from_us <= second * SECOND_US < r.until_us), None)
        if not inside:
            found.append(N)
        elif level is None:
            found.append(U)
        else:
            said = statuses(plain_samples_of(samples, ER), level)[inside].tolist()
            found.append(B if Status.BELOW in said else G if any(one != Status.UNTRUSTED for one in said) else U)
    return found


@given(two_port_samples(max_size=40), st.integers(-5, 30), st.integers(1, 60), st.lists(st.integers(0, 60), max_size=4))
def test_any_samples_agree_with_the_rule_by_hand_and_cutting_changes_nothing(samples, skip_s, length_s, cut_s):
    from_s = int(samples.at_us[0] // SECOND_US) + skip_s
    rulings = [er_limit(20.0, 0, from_s + 20), er_limit(28.0, from_s + 25)]
    edges = [from_s - 60, *sorted({from_s, *(from_s + cut for cut in cut_s if cut < length_s)}), from_s + length_s]
    state, parts = TapFold(), []
    for begin, end in zip(edges, edges[1:], strict=False):
        first, last = np.searchsorted(samples.at_us, [begin * SECOND_US, end * SECOND_US])
        following = int(samples.at_us[last]) if last < len(samples) else None
        state, part = fold_tap(
            state, samples.take(slice(first, last)), rulings, begin * SECOND_US, end * SECOND_US,
            next_at_us=following, interval_s=1.0,
        )
        parts.append(part)
    whole = joined(parts[1:])
    kept = samples.take(samples.at_us >= edges[0] * SECOND_US)
    assert whole.klass.tolist() == by_hand(kept, rulings, from_s, length_s, 1.0)
    assert not (whole.is_doubtful & (whole.klass != G)).any()
    assert ((whole.why != 0) == (np.isin(whole.klass, [B, U]) | whole.is_doubtful)).all()


@given(two_port_samples(max_size=40), st.lists(st.integers(1, 100), max_size=5))
def test_with_an_undeclared_interval_cutting_changes_nothing_either(samples, cut_s):
    begin, end = int(samples.at_us[0] // SECOND_US), int(samples.at_us[-1] // SECOND_US) + 5
    edges = [begin, *sorted({begin + cut for cut in cut_s if begin + cut < end}), end]

    def fold_over(edges):
        state, parts = TapFold(), []
        for one, two in zip(edges, edges[1:], strict=False):
            first, last = np.searchsorted(samples.at_us, [one * SECOND_US, two * SECOND_US])
            following = int(samples.at_us[last]) if last < len(samples) else None
            chosen = samples.take(slice(first, last))
            state, part = fold_tap(state, chosen, [er_limit()], one * SECOND_US, two * SECOND_US, next_at_us=following)
            parts.append(part)
        return joined(parts)

    whole, cut = fold_over([begin, end]), fold_over(edges)
    for name in ("klass", "is_doubtful", "why", "er_db", "least_er_db", "is_bound"):
        np.testing.assert_array_equal(getattr(whole, name), getattr(cut, name))
    assert whole.samples == cut.samples and whole.wanted_power == pytest.approx(cut.wanted_power)
