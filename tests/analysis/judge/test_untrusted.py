"""Readings that come but may not be judged raise their own alarm."""

import json

from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.seconds import plain_samples_of
from analysis.judge.untrusted import UntrustedKind, UntrustedRule, UntrustedState, fold_untrusted
from tests.analysis.judge.samples import ER, er_seconds
from tests.strategies import cuts, two_port_samples

RULE = UntrustedRule(on_delay_s=10.0, off_delay_s=5.0)


def events(seconds, interval_s=1.0):
    return [
        (e.kind, e.at_us // 1_000_000, e.began_us // 1_000_000)
        for e in fold_untrusted(RULE, UntrustedState(), seconds, interval_s)[1]
    ]


def test_raised_after_the_delay_and_returned_when_judged_again():
    seconds = er_seconds([30.0] * 60, untrusted=range(10, 40))
    assert events(seconds) == [(UntrustedKind.RAISED, 20, 10), (UntrustedKind.RETURNED, 45, 40)]


def test_a_short_spell_or_a_single_good_second_between_raises_nothing():
    assert events(er_seconds([30.0] * 60, untrusted=[*range(10, 20), *range(21, 31)])) == []


def test_a_low_value_is_judged_and_so_not_untrusted():
    assert events(er_seconds([3.0] * 60)) == []


def test_a_bound_that_cannot_decide_is_not_untrusted():
    assert events(er_seconds([90.0] * 60, floor2=1e-9)) == []


def test_silence_restarts_the_delay_and_keeps_an_open_alarm():
    times = [*range(8), *range(100, 108)]
    assert events(er_seconds([30.0] * 16, at_s=times, untrusted=range(16))) == []
    times = [*range(20), *range(100, 103), *range(200, 206)]
    assert events(er_seconds([30.0] * 29, at_s=times, untrusted=range(20))) == [
        (UntrustedKind.RAISED, 10, 0),
        (UntrustedKind.RETURNED, 205, 200),
    ]


@given(two_port_samples(max_size=100), st.data())
def test_cutting_the_data_anywhere_changes_nothing(reduced, data):
    samples = plain_samples_of(reduced, ER)
    rule = UntrustedRule(on_delay_s=2.0, off_delay_s=1.0)
    state, found = UntrustedState(), []
    for part in data.draw(cuts(len(samples))):
        state, more = fold_untrusted(
            rule, UntrustedState.from_json(json.loads(json.dumps(state.as_json()))), samples.take(part), 1.0
        )
        found += more
    assert (state, found) == fold_untrusted(rule, UntrustedState(), samples, 1.0)
