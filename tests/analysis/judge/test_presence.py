"""Silence on the server's clock, only while the door was up."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.presence import Presence, cadence_s, door_time_us, presences, silences

S = 1_000_000
ALWAYS = np.array([[0, 10_000 * S]])


def test_job_example_of_a_stopped_sender():
    """Job paper: a 1 Hz sender stops -> no reading by 4 s; called after the set time."""
    last = np.array([100 * S])
    states = [presences(last, 100 * S + t, ALWAYS, 1.0, 60.0)[0] for t in (3 * S, 3 * S + 1, 4 * S, 59 * S, 60 * S)]
    assert states == [Presence.PRESENT, Presence.LATE, Presence.LATE, Presence.LATE, Presence.SILENT]


def test_a_call_never_comes_before_three_intervals():
    assert presences(np.array([0]), 70 * S, ALWAYS, 30.0, 60.0) == [Presence.PRESENT]
    assert presences(np.array([0]), 91 * S, ALWAYS, 30.0, 60.0) == [Presence.SILENT]


def test_time_in_which_the_door_was_down_is_no_silence():
    door = np.array([[0, 100 * S], [1000 * S, 2000 * S]])
    last = np.array([99 * S, 99 * S])
    assert presences(last, 1001 * S, door, np.array([1.0, 0.5]), 60.0) == [Presence.PRESENT, Presence.LATE]
    assert presences(last[:1], 1059 * S, door, 1.0, 60.0) == [Presence.SILENT]


def test_many_taps_at_once():
    assert presences(np.array([0, 95, 99]) * S, 100 * S, ALWAYS, 1.0, np.array([60.0, 60.0, 2.0])) == [
        Presence.SILENT,
        Presence.LATE,
        Presence.PRESENT,
    ]


def test_a_batch_sender_s_cadence_is_that_of_its_batches():
    assert cadence_s(np.arange(10) * 60 * S, 1.0) == 60.0
    assert cadence_s(np.array([5, 5, 5]), 1.0) == 1.0
    assert cadence_s(np.zeros(0, np.int64), None) is None


def test_silences_are_replayed_from_arrivals():
    arrivals = np.concatenate([np.arange(0, 100), [110], [300, 301]]) * S
    found = silences(arrivals, 310 * S, ALWAYS, 1.0, 60.0)
    assert [
        (f.last_heard_us // S, f.shown_us // S, f.called_us and f.called_us // S, f.ended_us and f.ended_us // S) for f in found
    ] == [(99, 102, None, 110), (110, 113, 170, 300), (301, 304, None, None)]


def test_replayed_silence_leaves_out_a_closed_door():
    door = np.array([[0, 100 * S], [200 * S, 1000 * S]])
    (found,) = silences(np.array([90 * S]), 300 * S, door, 1.0, 60.0)
    assert (found.shown_us, found.called_us, found.ended_us) == (93 * S, 250 * S, None)


@given(st.lists(st.integers(1, 50), min_size=0, max_size=12), st.integers(0, 300), st.integers(0, 300))
def test_door_time_equals_counting(steps, one, other):
    edges = np.cumsum(steps)[: len(steps) // 2 * 2].reshape(-1, 2)
    up = np.zeros(1000, dtype=bool)
    for start, end in edges:
        up[start:end] = True
    low, high = sorted((one, other))
    assert door_time_us(low, high, edges) == up[low:high].sum()


@given(st.lists(st.integers(1, 30), min_size=1, max_size=20), st.integers(1, 60))
def test_replay_agrees_with_what_was_judged_live(steps, later):
    """At every moment, the live state is that of the replayed silences."""
    arrivals = np.cumsum(steps) * S
    end = int(arrivals[-1]) + later * S
    found = silences(arrivals, end, ALWAYS, 1.0, 10.0)
    for now in range(int(arrivals[0]), end, S // 2):
        last = arrivals[arrivals <= now][-1:]
        live = presences(last, now, ALWAYS, 1.0, 10.0)[0]
        current = [f for f in found if f.last_heard_us < now and (f.ended_us is None or now < f.ended_us)]
        late = bool(current) and now > current[0].shown_us
        silent = bool(current) and current[0].called_us is not None and now >= current[0].called_us
        assert live is (Presence.SILENT if silent else Presence.LATE if late else Presence.PRESENT)
