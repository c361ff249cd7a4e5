"""Each kind of fault by its own figures."""

import numpy as np
import pytest

from labmon.demo.faults import JointCreep, Ledger, ModeHops, SourceAgeing, SourceOff, Touch


def test_a_touch_rises_in_its_time_rings_down_and_leaves_a_rest():
    """JOB 8, day 3: 14° in 0.4 s, ring-down 40 s, stays +6°."""
    touch = Touch(subjects=("N1",), start_s=100.0, peak_deg=14.0, stays_deg=6.0)
    angle = np.degrees(touch.angle_rad(np.array([99.9, 100.2, 100.4, 140.4, 1000.0])))
    np.testing.assert_allclose(angle, [0.0, 7.0, 14.0, 6 + 8 / np.e, 6.0], atol=1e-6)


def test_a_held_touch_stays_at_its_peak():
    touch = Touch(subjects=("N4",), start_s=0.0, end_s=1000.0, peak_deg=14.0, hold_s=180.0, ring_down_s=10.0)
    angle = np.degrees(touch.angle_rad(np.array([1.0, 179.0, 260.0, 1000.0])))
    np.testing.assert_allclose(angle, [14.0, 14.0, 14.0 * np.exp(-7.96), 0.0], atol=1e-9)


def test_hops_step_power_and_leak_and_come_back():
    hops = ModeHops(subjects=("L",), start_s=0.0, end_s=50.0, hops=((10.0, 20.0), (30.0, 40.0)), power_share=-0.021,
                    leak_factors=(("N2", (1.8, 0.6)),))
    at_s = np.array([5.0, 15.0, 25.0, 35.0, 45.0])
    np.testing.assert_allclose(hops.power_factor(at_s), [1, 0.979, 1, 0.979, 1])
    np.testing.assert_allclose(hops.leak_factor("N2", at_s), [1, 1.8, 1, 0.6, 1])
    np.testing.assert_allclose(hops.leak_factor("N3", at_s), 1.0)


def test_creep_is_linear_in_db_and_stays():
    creep = JointCreep(subjects=("S2",), start_s=0.0, end_s=10.0, from_db=30.0, to_db=24.5)
    np.testing.assert_allclose(-10 * np.log10(creep.mean_leak(np.array([-1.0, 0.0, 5.0, 10.0, 99.0]))),
                               [30, 30, 27.25, 24.5, 24.5])


def test_ageing_ends_with_the_replacement():
    ageing = SourceAgeing(subjects=("S1 laser",), start_s=0.0, end_s=9 * 86400.0, share_per_day=0.006)
    np.testing.assert_allclose(ageing.power_factor(np.array([0.0, 5 * 86400.0, 9 * 86400.0])), [1.0, 0.97, 1.0])


def test_the_ledger_finds_rows_by_kind_and_subject():
    off = SourceOff(subjects=("A",), start_s=1.0, end_s=2.0)
    ledger = Ledger((off,))
    assert ledger.of(SourceOff, "A", "B") == [off]
    assert ledger.of(SourceOff, "B") == ledger.of(Touch, "A") == []
    assert off.lasts(np.array([0.9, 1.0, 2.0])).tolist() == [False, True, False]
    with pytest.raises(AttributeError):
        off.start_s = 5.0
