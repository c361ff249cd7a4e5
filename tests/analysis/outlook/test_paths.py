"""How long samples stand, and from where displacement counts."""

import numpy as np
import pytest

from analysis.outlook.paths import gather_paths
from tests.analysis.outlook.nights import MINUTE_US, calm, minutes_us, night


def test_a_full_night_is_judged_to_its_end():
    paths = gather_paths([calm(0), calm(1)])
    np.testing.assert_array_equal(paths.held_s, np.full(1440, 60.0))
    np.testing.assert_array_equal(paths.trusted_share, [1.0, 1.0])
    np.testing.assert_array_equal(paths.followed_s, [43_200.0, 43_200.0])


def test_a_sample_holds_for_three_intervals_at_most():
    """Minutes 0, 1, 2, then a hole until minute 10: the sample at 2 stands until 5, the rest is a gap."""
    at_us = minutes_us(0)[[0, 1, 2, 10, 11]]
    paths = gather_paths([night(0, np.zeros(5), at_us=at_us, length_s=720.0)])
    np.testing.assert_array_equal(paths.held_s, [60, 60, 180, 60, 60])
    assert paths.trusted_share[0] == pytest.approx(420 / 720)


def test_declared_interval_goes_before_the_median():
    paths = gather_paths([night(0, np.zeros(5), at_us=minutes_us(0)[[0, 1, 2, 10, 11]], length_s=720.0, interval_s=20.0)])
    np.testing.assert_array_equal(paths.held_s, [60, 60, 60, 60, 60])


def test_untrusted_and_empty_samples_are_not_judged():
    trusted, state = np.ones(720, bool), np.full(720, 0.1)
    trusted[100:110], state[0:5] = False, np.nan
    paths = gather_paths([night(0, state, is_trusted=trusted)])
    assert paths.trusted_share[0] == pytest.approx(705 / 720)
    assert paths.start[0] == 0.1


def test_a_cut_ends_the_story():
    paths = gather_paths([calm(0, cut_at_us=int(minutes_us(0)[300]))])
    assert paths.followed_s[0] == 18_000.0 and paths.held_s.sum() == 18_000.0 and paths.trusted_share[0] == 1.0


def test_windows_are_followed_as_long_as_the_run():
    assert gather_paths([calm(0)], 3600.0).held_s.sum() == 3600.0


def test_a_start_at_the_floor_counts_from_nothing():
    """The angle is at most 3°: displacement from 0 is never too small."""
    paths = gather_paths([calm(0, is_upper_bound=np.ones(720, bool)), calm(1, start_state=0.01), calm(2)])
    np.testing.assert_allclose(paths.start, [0.0, 0.01, np.radians(3.0)])


def test_nights_without_samples_hold_nothing():
    empty = night(0, np.zeros(0))
    untrusted = calm(1, is_trusted=np.zeros(720, bool))
    for windows in ([empty, calm(2)], [calm(2), empty], [untrusted, calm(2)], [empty]):
        paths = gather_paths(windows)
        for window, share, start in zip(paths.windows, paths.trusted_share, paths.start, strict=True):
            assert share == (1.0 if window.start_us == calm(2).start_us else 0.0)
            assert np.isnan(start) == (share == 0.0)


def test_samples_before_the_start_do_not_count():
    paths = gather_paths([calm(0, at_us=minutes_us(0) - 10 * MINUTE_US)])
    assert paths.held_s[:10].sum() == 0.0 and paths.held_s.sum() == 710 * 60.0 + 120.0


def test_first_windows_are_those_gathered_alone():
    windows = [calm(day, angle_deg=1.0 + day) for day in range(5)]
    part, alone = gather_paths(windows).upto(3), gather_paths(windows[:3])
    for name in ("first", "at_us", "state", "held_s", "start", "followed_s", "trusted_share"):
        np.testing.assert_array_equal(getattr(part, name), getattr(alone, name))


def test_kinds_are_not_mixed():
    for windows in ([], [calm(0), night(1, np.ones((720, 3)))]):
        with pytest.raises(ValueError, match="all two-port or all Stokes"):
            gather_paths(windows)
