"""Stacking calibration versions of many taps."""

import numpy as np
import pytest

from analysis.reduce.calibration import TapCalibration, stack


def test_versions_are_stacked_and_taken_per_sample():
    versions = [
        TapCalibration(zero1=1.0, wanted_state=[1, 0, 0], saturation1=5.0, handedness="ieee"),
        TapCalibration(zero1=2.0, leakage=[[0.9, 0.1], [0.2, 0.8]], monitor_ratio=7.0),
    ]
    cal = stack(versions).take(np.array([0, 1, 1]))
    assert cal.zero1.tolist() == [1.0, 2.0, 2.0] and cal.zero2 == 0.0
    np.testing.assert_array_equal(cal.saturation1, [5.0, np.nan, np.nan])
    np.testing.assert_array_equal(cal.leakage[0], np.eye(2))
    np.testing.assert_array_equal(cal.leakage[2], versions[1].leakage)
    np.testing.assert_array_equal(cal.wanted_state, [[1, 0, 0], [np.nan] * 3, [np.nan] * 3])
    assert cal.handedness.tolist() == ["ieee", "optics", "optics"]
    np.testing.assert_array_equal(cal.monitor_ratio, [np.nan, 7.0, 7.0])


def test_equal_fields_stay_single():
    cal = stack([TapCalibration(gain_ratio=1.1)] * 3)
    assert cal.gain_ratio == 1.1 and cal.leakage is None and cal.saturation2 is None


def test_wrong_shapes_are_named():
    with pytest.raises(ValueError, match="wanted_state has shapes"):
        stack([TapCalibration(wanted_state=[1, 0])])
    with pytest.raises(ValueError, match="versions is empty"):
        stack([])
