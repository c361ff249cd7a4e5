"""Which motion it is, and when nobody can say."""

import numpy as np
import pytest

from analysis.drift.motion import DECIDED_FROM, Motion, motion_in_plane, motion_of
from tests.analysis.drift.walks import about_start, bounded, noisy, walk

COUNT = 500
TURN = np.arange(COUNT)


def still(rng):
    return noisy(about_start(np.zeros((COUNT, 2))), 0.003, rng)


def brownian(rng):
    return noisy(walk(COUNT, 1e-5, rng), 0.003, rng)


def pulled(rng):
    return noisy(about_start(bounded(COUNT, 0.93, 0.05, rng)), 0.003, rng)


def circling(rng):
    circle = 0.03 * np.stack([np.cos(TURN / 9.7), np.sin(TURN / 9.7)], axis=1)
    return noisy(about_start(circle + np.cumsum(0.002 * rng.standard_normal((COUNT, 2)), axis=0)), 0.003, rng)


@pytest.mark.parametrize(("make", "motion"), [(still, Motion.STILL), (brownian, Motion.BROWNIAN), (pulled, Motion.BOUNDED),
                                              (circling, Motion.CYCLIC)])
def test_right_or_undecided_and_hardly_ever_wrong(make, motion):
    """20 simulated records of each kind: at least 16 named rightly, at most one wrongly."""
    rng = np.random.default_rng(1)
    found = [motion_of(make(rng), 10.0) for _ in range(20)]
    named = [one.motion for one in found]
    assert named.count(motion) >= 16
    assert 20 - named.count(motion) - named.count(Motion.UNDECIDED) <= 1
    for one in found:
        assert (one.lead >= DECIDED_FROM) == (one.motion is not Motion.UNDECIDED) == (one.reason == "")
        assert min(one.criterion.values()) == 0.0


def test_period_amplitude_and_relaxation_are_found():
    rng = np.random.default_rng(2)
    found = motion_of(circling(rng), 10.0)
    np.testing.assert_allclose(found.period_s, 2 * np.pi * 97.0, rtol=0.05)
    np.testing.assert_allclose(found.amplitude_rad, 0.03, rtol=0.25)
    relaxation_s = [motion_of(pulled(rng), 10.0).relaxation_s for _ in range(10)]
    np.testing.assert_allclose(np.median(relaxation_s), -10.0 / np.log(0.93), rtol=0.35)


def test_thin_evidence_is_undecided():
    rng = np.random.default_rng(3)
    slow = motion_of(noisy(about_start(bounded(120, 0.985, 0.05, rng)), 0.003, rng), 1.0)  # two relaxation times only
    assert slow.motion in (Motion.UNDECIDED, Motion.BROWNIAN)
    assert motion_of(walk(40, 1e-5, rng), 1.0).reason == "fewer than 48 steps"
    assert "sphere" in motion_of(walk(4000, 1e-2, rng), 1.0).reason
    assert motion_of(np.tile([1.0, 0.0, 0.0], (100, 1)), 1.0).reason == "the readings never change"
    assert motion_of(np.full((100, 3), np.nan), 1.0).motion is Motion.UNDECIDED


def test_an_angle_alone_and_gaps():
    rng = np.random.default_rng(4)
    position = (0.03 * np.sin(TURN / 9.7) + 0.003 * rng.standard_normal(COUNT))[:, None]
    position[100:130] = np.nan
    found = motion_in_plane(position, 1.0)
    assert found.motion is Motion.CYCLIC
    np.testing.assert_allclose(found.period_s, 2 * np.pi * 9.7, rtol=0.05)


def test_faults_are_named():
    with pytest.raises(ValueError, match="shape"):
        motion_of(np.zeros((9, 2)), 1.0)
    with pytest.raises(ValueError, match="interval_s"):
        motion_in_plane(np.zeros((9, 2)), 0.0)
