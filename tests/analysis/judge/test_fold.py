"""The alarm fold: worked examples, and what must hold for any data."""

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.fold import EventKind, FoldState, Level, episodes_of, fold, start_state
from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import plain_samples_of, seconds_of
from tests.analysis.judge.samples import ANGLE, ER, er_rule, er_seconds, reduced_er
from tests.reference.values import references
from tests.strategies import cuts, two_port_samples

RAISED, ROSE, RETURNED = EventKind.RAISED, EventKind.ROSE, EventKind.RETURNED


def events(rule, seconds, interval_s=1.0):
    return fold(rule, start_state(), seconds, interval_s)[1]


def brief(found):
    return [(event.kind, event.level, event.at_us // 1_000_000) for event in found]


@pytest.mark.parametrize("row", references("T12-sm"), ids=lambda row: row["id"])
def test_deadband_and_delays(row):
    """Rule as in OPC 10000-9, annex B.1.5 (on-delay, off-delay, deadband); 18 samples, worked out by two other programs."""
    x = row["inputs"]
    rule = er_rule(alarm=x["limit_dB"], deadband=x["deadband_dB"], on_delay_s=x["on_delay_s"], off_delay_s=x["off_delay_s"])
    seconds = er_seconds(x["values_dB"], at_s=np.arange(len(x["values_dB"])) * x["dt_s"])
    words = {RAISED: "ACTIVE", RETURNED: "CLEAR"}
    assert [[e.at_us // 1_000_000, words[e.kind]] for e in events(rule, seconds, x["dt_s"])] == row["expected"]


class TestJobExample:
    """Job paper: limit 20 dB, 60 s, 1 dB."""

    rule = er_rule()

    def test_30_seconds_below_raise_nothing(self):
        assert events(self.rule, er_seconds([25.0] * 10 + [19.5] * 30 + [25.0] * 200)) == []

    def test_61_seconds_below_raise_exactly_one(self):
        found = events(self.rule, er_seconds([25.0] * 10 + [19.5] * 61))
        assert brief(found) == [(RAISED, Level.ALARM, 70)]
        assert found[0].began_us == 10_000_000 and found[0].value == pytest.approx(19.5)

    def test_60_samples_are_59_seconds_and_raise_nothing(self):
        assert events(self.rule, er_seconds([25.0] * 10 + [19.5] * 60 + [25.0] * 100)) == []

    def test_an_hour_of_toggling_at_the_limit_is_still_one(self):
        found = events(self.rule, er_seconds([25.0] * 10 + [19.5] * 61 + [19.9, 20.1] * 1800))
        assert brief(found) == [(RAISED, Level.ALARM, 70)]

    def test_60_seconds_above_the_deadband_clear_it(self):
        found = events(self.rule, er_seconds([19.5] * 61 + [19.9, 20.1] * 10 + [21.1] * 61))
        assert brief(found) == [(RAISED, Level.ALARM, 60), (RETURNED, Level.ALARM, 141)]
        assert found[1].began_us == 81_000_000

    def test_toggling_at_the_limit_alone_never_raises(self):
        """Each value at or above the limit starts the on-delay anew."""
        assert events(self.rule, er_seconds([19.9, 20.1] * 1800)) == []


def test_an_angle_limit_works_the_other_way_round():
    """Limit 12 deg, deadband 1 deg: 19 dB (12.8 deg) raises, 20 dB (11.4 deg) does not yet clear, 21 dB (10.2 deg) does."""
    rule = LimitRule(quantity=ANGLE, alarm=12.0, on_delay_s=2.0, off_delay_s=2.0, deadband=1.0)
    seconds = seconds_of(reduced_er([25.0] * 3 + [19.0] * 5 + [20.0] * 10 + [21.0] * 5), ANGLE)
    assert brief(events(rule, seconds)) == [(RAISED, Level.ALARM, 5), (RETURNED, Level.ALARM, 20)]


def test_warning_and_alarm_are_one_episode_and_two_messages():
    rule = er_rule(warning=23.0, on_delay_s=5.0, off_delay_s=5.0)
    found = events(rule, er_seconds([30.0] * 5 + [22.0] * 10 + [19.0] * 10 + [30.0] * 10))
    assert brief(found) == [(RAISED, Level.WARNING, 10), (ROSE, Level.ALARM, 20), (RETURNED, Level.ALARM, 30)]
    (episode,) = episodes_of(found)
    assert (episode.began_us, episode.raised_us, episode.alarm_us) == (5_000_000, 10_000_000, 20_000_000)
    assert (episode.good_from_us, episode.returned_us, episode.level) == (25_000_000, 30_000_000, Level.ALARM)


def test_a_fall_straight_below_the_alarm_level_is_one_message():
    rule = er_rule(warning=23.0, on_delay_s=5.0)
    assert brief(events(rule, er_seconds([30.0] * 5 + [19.0] * 10))) == [(RAISED, Level.ALARM, 10)]


def test_a_warning_clears_above_the_warning_level_not_the_alarm_level():
    rule = er_rule(warning=23.0, on_delay_s=5.0, off_delay_s=5.0)
    still = events(rule, er_seconds([22.0] * 10 + [23.9] * 60))
    assert brief(still) == [(RAISED, Level.WARNING, 5)]
    assert brief(events(rule, er_seconds([19.0] * 10 + [21.5] * 60 + [24.1] * 6)))[-1] == (RETURNED, Level.ALARM, 75)


def test_untrusted_time_neither_counts_nor_resets_up_to_three_intervals():
    rule = er_rule(on_delay_s=10.0)
    values = [25.0] * 5 + [19.0] * 20
    assert brief(events(rule, er_seconds(values))) == [(RAISED, Level.ALARM, 15)]
    # Two untrusted seconds in the middle: known seconds are 3 s apart, the delay is 2 s longer.
    assert brief(events(rule, er_seconds(values, untrusted=[8, 9]))) == [(RAISED, Level.ALARM, 17)]
    # Three: 4 s apart, so the delay starts anew at second 11.
    assert brief(events(rule, er_seconds(values, untrusted=[8, 9, 10]))) == [(RAISED, Level.ALARM, 21)]


def test_missing_time_resets_the_delay_beyond_three_intervals():
    rule = er_rule(on_delay_s=10.0)
    short = [*range(8), *range(10, 25)]
    assert brief(events(rule, er_seconds([19.0] * len(short), at_s=short))) == [(RAISED, Level.ALARM, 10)]
    long = [*range(8), *range(11, 25)]
    assert brief(events(rule, er_seconds([19.0] * len(long), at_s=long))) == [(RAISED, Level.ALARM, 21)]


def test_the_interval_may_change_along_the_data():
    """A tap that slows down to one reading in 10 s: its own interval decides what a break is."""
    times = [*range(5), 14, 24, 34]
    rule, seconds = er_rule(on_delay_s=30.0), er_seconds([19.0] * 8, at_s=times)
    assert brief(events(rule, seconds, np.array([1.0] * 5 + [10.0] * 3))) == [(RAISED, Level.ALARM, 34)]
    assert events(rule, seconds, 1.0) == []


def test_a_gap_does_not_close_an_open_alarm():
    rule = er_rule(on_delay_s=5.0, off_delay_s=5.0)
    times = [*range(10), *range(500, 503), *range(600, 620)]
    values = [19.0] * 10 + [25.0] * 3 + [25.0] * 20
    assert brief(events(rule, er_seconds(values, at_s=times))) == [(RAISED, Level.ALARM, 5), (RETURNED, Level.ALARM, 605)]


def test_an_undecided_bound_never_raises_and_never_clears():
    """At floor against a limit above what the floor can show: an open alarm stays, a closed one is not opened."""
    rule = er_rule(alarm=60.0, on_delay_s=3.0, off_delay_s=3.0)
    floor = [90.0] * 30  # under 1 nW noise: at least 57 dB, below the limit of 60: cannot tell
    assert events(rule, er_seconds(floor, floor2=1e-9)) == []
    found = events(rule, er_seconds([50.0] * 5 + floor, floor2=1e-9))
    assert brief(found) == [(RAISED, Level.ALARM, 3)]


def test_a_bound_that_meets_the_level_clears():
    rule = er_rule(alarm=50.0, on_delay_s=3.0, off_delay_s=3.0)
    found = events(rule, er_seconds([45.0] * 5 + [90.0] * 10, floor2=1e-9))
    assert brief(found) == [(RAISED, Level.ALARM, 3), (RETURNED, Level.ALARM, 8)]
    assert found[1].value == pytest.approx(57.08, abs=0.01)


def test_delays_run_in_data_time_not_in_samples():
    rule = er_rule(on_delay_s=60.0)
    assert brief(events(rule, er_seconds([19.0] * 8, at_s=np.arange(8) * 15), 15.0)) == [(RAISED, Level.ALARM, 60)]


def test_no_delay_raises_at_the_first_sample():
    rule = er_rule(on_delay_s=0.0, off_delay_s=0.0, deadband=0.0)
    assert brief(events(rule, er_seconds([25.0, 19.0, 20.5, 19.0]))) == [
        (RAISED, Level.ALARM, 1),
        (RETURNED, Level.ALARM, 2),
        (RAISED, Level.ALARM, 3),
    ]


def test_a_changed_limit_keeps_an_open_alarm_until_it_is_clear_under_the_new_one():
    state, found = fold(er_rule(on_delay_s=5.0), start_state(), er_seconds([19.0] * 10), 1.0)
    assert state.level is Level.ALARM and len(found) == 1
    taken_over = start_state(state)
    assert taken_over.began_us == state.began_us and not taken_over.clear_timer.is_running
    new = er_rule(alarm=15.0, off_delay_s=5.0)
    later = er_seconds([19.0] * 10, at_s=np.arange(10) + 10)
    assert brief(fold(new, taken_over, later, 1.0)[1]) == [(RETURNED, Level.ALARM, 15)]


def test_quantities_must_agree():
    with pytest.raises(ValueError, match="seconds are of er_db, the rule is for dop"):
        fold(LimitRule(quantity=Quantity.DOP, alarm=0.9), start_state(), er_seconds([20.0]), 1.0)


def test_episodes_need_the_events_from_the_start():
    found = events(er_rule(on_delay_s=1.0, off_delay_s=1.0), er_seconds([19.0] * 3 + [25.0] * 3))
    assert len(episodes_of(found)) == 1
    with pytest.raises(ValueError, match="without an open episode"):
        episodes_of(found[1:])


rules = st.builds(
    LimitRule,
    quantity=st.just(ER),
    alarm=st.sampled_from([18.0, 20.0, 58.0]),
    warning=st.sampled_from([None, 21.0, 60.0]),
    on_delay_s=st.sampled_from([0.0, 1.0, 3.0, 7.5]),
    off_delay_s=st.sampled_from([0.0, 1.0, 4.0]),
    deadband=st.sampled_from([0.0, 1.0]),
)


@given(two_port_samples(max_size=120), rules, st.data())
def test_cutting_the_data_anywhere_changes_nothing(reduced, rule, data):
    """Live in small pieces, with the state through JSON in between, is the replay in one go."""
    samples = plain_samples_of(reduced, ER)
    whole_state, whole = fold(rule, start_state(), samples, 1.0)
    state, found = start_state(), []
    for part in data.draw(cuts(len(samples))):
        state, more = fold(rule, FoldState.from_json(json.loads(json.dumps(state.as_json()))), samples.take(part), 1.0)
        found += more
    assert found == whole and state == whole_state


@given(two_port_samples(max_size=120), rules)
def test_at_most_one_episode_is_open_and_events_alternate(reduced, rule):
    state, found = fold(rule, start_state(), plain_samples_of(reduced, ER), 1.0)
    level = None
    for event in found:
        if event.kind is RAISED:
            assert level is None
        elif event.kind is ROSE:
            assert level is Level.WARNING and event.level is Level.ALARM
        else:
            assert level is event.level
        level = None if event.kind is RETURNED else event.level
        assert event.began_us <= event.at_us and np.isfinite(event.value)
    assert level is state.level
    assert sum(episode.returned_us is None for episode in episodes_of(found)) == (level is not None)
    assert [event.at_us for event in found] == sorted(event.at_us for event in found)


@given(two_port_samples(max_size=120), rules)
def test_refolding_from_any_checkpoint_gives_the_same_rest(reduced, rule):
    samples = plain_samples_of(reduced, ER)
    middle = len(samples) // 2
    checkpoint, before = fold(rule, start_state(), samples.take(slice(0, middle)), 1.0)
    kept = checkpoint.as_json()
    first = fold(rule, checkpoint, samples.take(slice(middle, None)), 1.0)
    assert checkpoint.as_json() == kept  # a fold leaves its checkpoint as it was
    assert fold(rule, FoldState.from_json(kept), samples.take(slice(middle, None)), 1.0) == first
    assert before + first[1] == fold(rule, start_state(), samples, 1.0)[1]


@given(two_port_samples(max_size=80), rules)
def test_untrusted_data_alone_raise_nothing(reduced, rule):
    for quantity in reduced.trust:
        reduced.trust[quantity] = np.minimum(reduced.trust[quantity], 1)
    assert fold(rule, start_state(), plain_samples_of(reduced, ER), 1.0)[1] == []
