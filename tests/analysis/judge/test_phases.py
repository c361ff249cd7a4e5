"""A limit's versions rule one after the other; an open episode goes over."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.fold import EventKind, FoldState
from analysis.judge.phases import FOREVER_US, Standing, episodes_in, fold_through, phase_at, phases_of
from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import Seconds

S = 1_000_000


def rule(alarm, **values):
    return LimitRule(quantity=Quantity.ER_DB, alarm=alarm, **{"on_delay_s": 5.0, "off_delay_s": 5.0, "deadband": 1.0} | values)


def seconds(er_db):
    er_db, count = np.asarray(er_db, float), len(er_db)
    at_us = np.arange(count, dtype=np.int64) * S
    return Seconds(
        Quantity.ER_DB, 1.0, at_us, er_db, er_db, er_db, np.ones(count, bool), np.zeros(count, bool), np.ones(count, np.int64)
    )


def run(phases, er_db, *cuts):
    standing, found = Standing(phases[0].version_id, phases[0].from_us, FoldState()), []
    for until_us in (*cuts, len(er_db) * S):
        standing, more = fold_through(phases, standing, seconds(er_db), None, until_us)
        found += more
    return standing, found


def test_phases_begin_at_whole_seconds_and_end_where_the_next_begins():
    first, second = phases_of([(1, rule(20), 1_500_000, False, False), (2, rule(15), 7_000_000, True, False)])
    assert (first.from_us, first.until_us, second.until_us) == (2 * S, 7 * S, FOREVER_US)
    assert phase_at([first, second], 1 * S) is None and phase_at([first, second], 7 * S) is second


def test_open_episode_goes_on_under_the_new_limit_with_delays_anew():
    phases = phases_of([(1, rule(20), 0, False, False), (2, rule(15), 10 * S, False, False)])
    _, found = run(phases, np.full(30, 18.0))
    assert [(one.event.kind, one.event.at_us, one.version_id) for one in found] == [
        (EventKind.RAISED, 5 * S, 1),
        (EventKind.RETURNED, 15 * S, 2),
    ]


def test_retired_limit_ends_the_episode_at_its_end_and_finds_nothing_more():
    phases = phases_of([(1, rule(20), 0, False, False), (2, rule(20), 10 * S, True, False)])
    _, found = run(phases, np.full(30, 18.0))
    assert [(one.event.kind, one.event.at_us) for one in found] == [(EventKind.RAISED, 5 * S), (EventKind.RETURNED, 10 * S)]


def test_nothing_is_judged_before_the_first_version():
    phases = phases_of([(1, rule(20), 20 * S, False, False)])
    standing, found = run(phases, np.full(15, 10.0))
    assert found == [] and standing.at_us == 20 * S


@given(st.lists(st.sampled_from([12.0, 17.0, 19.0, 22.0, 30.0]), min_size=20, max_size=80), st.data())
def test_cutting_the_time_anywhere_changes_nothing(er_db, data):
    phases = phases_of(
        [
            (1, rule(20, warning=23.0), 3 * S, False, False),
            (2, rule(15), 25 * S, False, False),
            (3, rule(18), 50 * S, True, False),
        ]
    )
    cuts = sorted(data.draw(st.lists(st.integers(0, len(er_db)), max_size=4)))
    cut_run, whole_run = run(phases, er_db, *(cut * S for cut in cuts)), run(phases, er_db)
    assert repr(cut_run) == repr(whole_run)  # the end by retirement has no value: NaN, which equals nothing


def test_episodes_of_a_stretch_have_their_worst_value():
    phases = phases_of([(1, rule(20), 0, False, False)])
    er_db = np.concatenate([np.full(10, 19.0), np.full(3, 17.0), np.full(10, 30.0)])
    standing = Standing(1, 0, FoldState())
    _, found = fold_through(phases, standing, seconds(er_db), None, 23 * S)
    (episode,) = episodes_in(found, standing, seconds(er_db))
    assert (episode.raised_us, episode.returned_us, episode.value, episode.is_continued) == (5 * S, 18 * S, 17.0, False)
    middle, before = fold_through(phases, standing, seconds(er_db), None, 8 * S)
    _, after = fold_through(phases, middle, seconds(er_db), None, 23 * S)
    (rest,) = episodes_in(after, middle, seconds(er_db))
    assert (rest.raised_us, rest.returned_us, rest.value, rest.is_continued) == (5 * S, 18 * S, 17.0, True)
