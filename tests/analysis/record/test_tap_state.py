from analysis.judge.interval import IntervalState
from analysis.record.tap_state import SNAPSHOTS, TapState


def test_state_comes_back_from_json():
    state = TapState(
        1_000_000, [[1.0, 2, 0.5, 3, 4, 5]], IntervalState(7, (1, 2)), arrivals_us=(5, 6), untrusted_upto_us=3
    ).with_snapshot(10, [1])
    assert TapState.from_json(state.as_json()) == state


def test_nothing_stored_is_the_beginning():
    assert TapState.from_json({}) == TapState.from_json(None) == TapState()


def test_only_the_newest_snapshots_are_kept_and_going_back_drops_later_ones():
    state = TapState()
    for at_us in range(0, 100, 10):
        state = state.with_snapshot(at_us, at_us)
    assert len(state.snapshots) == SNAPSHOTS and state.snapshots[-1] == (90, 90)
    assert state.with_snapshot(75, 0).snapshots == ((60, 60), (70, 70), (75, 0))
