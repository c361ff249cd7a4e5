"""The rooms of JOB 8: cycles, night setback, air fault."""

import numpy as np
import pytest

from labmon.demo.air import ROOMS, RoomAir
from labmon.demo.faults import Ledger
from labmon.demo.ledger import LEDGER
from labmon.demo.moments import moment

NORTH, SOUTH, VAULT = ROOMS


def _quiet(plan, days=6):
    return RoomAir(plan, 7, days, Ledger(()))


def _cycle(air, first_h, hours):
    """Amplitude of the strongest line between 10 and 60 min, K, and its period, s."""
    at_s = np.arange(moment(2, 0) + first_h * 3600, moment(2, 0) + (first_h + hours) * 3600, 10.0)
    kelvin = air.at(at_s) - air.at(at_s).mean()
    spectrum = 2 * np.abs(np.fft.rfft(kelvin * np.hanning(len(kelvin)))) / np.hanning(len(kelvin)).sum()
    period = len(at_s) * 10.0 / np.maximum(np.arange(len(spectrum)), 1e-9)
    spectrum[(period < 600) | (period > 3600)] = 0.0
    return spectrum.max(), period[spectrum.argmax()]


@pytest.mark.parametrize(("plan", "amplitude_k", "period_min"), [(NORTH, 0.35, 22), (SOUTH, 0.15, 38), (VAULT, 0.03, 31)])
def test_air_units_cycle_as_the_job_says(plan, amplitude_k, period_min):
    amplitude, period_s = _cycle(_quiet(plan), 8, 10)
    assert amplitude == pytest.approx(amplitude_k, rel=0.15)
    assert period_s / 60 == pytest.approx(period_min, rel=0.12)


def test_south_hall_is_set_back_at_night_and_the_others_are_not():
    day, night = np.arange(moment(3, 12), moment(3, 18), 10.0), np.arange(moment(3, 23), moment(4, 5), 10.0)
    drop = {plan.name: _quiet(plan).at(day).mean() - _quiet(plan).at(night).mean() for plan in ROOMS}
    assert drop["South Hall"] == pytest.approx(1.2, abs=0.2)
    assert abs(drop["North Hall"]) < 0.25
    assert abs(drop["Vault"]) < 0.05


def test_the_air_fault_warms_north_hall_only():
    at_s = np.arange(moment(9, 15), moment(9, 16), 10.0)
    warming = {plan.name: (RoomAir(plan, 7, 10, LEDGER).at(at_s) - RoomAir(plan, 7, 10, Ledger(())).at(at_s)).mean()
               for plan in ROOMS}
    assert warming["North Hall"] == pytest.approx(2.3, abs=0.05)
    assert warming["South Hall"] == warming["Vault"] == 0.0


def test_a_farther_horizon_leaves_the_past_as_it_was():
    near, far = _quiet(NORTH, 3), _quiet(NORTH, 9)
    np.testing.assert_array_equal(far.temperature_c[:len(near.temperature_c)], near.temperature_c)
