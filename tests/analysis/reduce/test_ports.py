"""Two-port and dark-port readings: zero, gain, leakage, wanted port, units, trust."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.rule import Quantity
from analysis.quantities import er_db_from_leak, leak_from_er_db
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import TrustContext, reduce_tap
from analysis.reduce.trust import Reason, Trust
from tests.reference.values import close, reference
from tests.strategies import powers_w

ER, ANGLE, DOP, POWER = Quantity.ER_DB, Quantity.ANGLE_DEG, Quantity.DOP, Quantity.POWER_W


def two_port(port1, port2, unit="W", context=None, cal=None, extra=None, **fields):
    columns = {"port1": np.atleast_1d(np.asarray(port1, float)), "port2": np.atleast_1d(np.asarray(port2, float))} | (extra or {})
    at_us = np.arange(len(columns["port1"])) * 1_000_000
    return reduce_tap("two-port", unit, at_us, columns, cal or TapCalibration(**fields), trust_context=context)


def dark_port(port2, unit="W", monitor=None, **fields):
    columns = {"port2": np.atleast_1d(np.asarray(port2, float))}
    if monitor is not None:
        columns["monitor"] = np.atleast_1d(np.asarray(monitor, float))
    return reduce_tap("dark-port", unit, np.zeros(len(columns["port2"]), np.int64), columns, TapCalibration(**fields))


def test_job_example_of_zero():
    """Job paper: 1.000 mW over 1.000 uW is 30.00 dB; with a zero of 0.300 uW on the dark port 31.55 dB."""
    np.testing.assert_allclose(two_port(1e-3, 1e-6).er_db, 30.0, atol=1e-9)
    np.testing.assert_allclose(two_port(1e-3, 1e-6, zero2=0.3e-6).er_db, 31.55, atol=0.005)


def test_ignored_zero_reads_22_db_instead_of_29():
    """T01-dark-02: what a forgotten zero of 0.5 uW costs."""
    row = reference("T01-dark-02")
    x = row["inputs"]
    np.testing.assert_allclose(two_port(x["raw_par_uW"], x["raw_cross_uW"], "uW").er_db, row["expected"], **close(row))
    taken = two_port(x["raw_par_uW"], x["raw_cross_uW"], "uW", zero1=0.5, zero2=0.5)
    np.testing.assert_allclose(taken.er_db, 10 * np.log10(99.5 / 0.12), rtol=1e-12)


def test_job_example_of_the_floor():
    found = two_port(1e-3, 0.0, floor2=1e-9)
    assert found.is_lower_bound[0] and found.angle_is_upper_bound[0]
    np.testing.assert_allclose(found.er_db, 57.1, atol=0.05)
    assert found.reasons[ER][0] == Reason.FLOOR
    assert found.trust[ER][0] == Trust.TRUSTED  # whether it is undecided depends on the limit: analysis/judge


def test_job_example_of_linear_averaging():
    """Job paper: 20 and 40 dB average to 22.97 dB, as sums of powers do."""
    leaks = leak_from_er_db(np.array([20.0, 40.0]))
    np.testing.assert_allclose(er_db_from_leak(leaks.mean()), 22.97, atol=0.005)
    found = two_port(np.full(2, 1e-3), 1e-3 * leaks)
    np.testing.assert_allclose(10 * np.log10(found.wanted_power.sum() / found.other_power.sum()), 22.97, atol=0.005)


def test_gain_ratio_is_gain_of_port_1_over_port_2():
    """T01-gain-01: V = g P on each port, ER = ER_raw - 10 log10(g1/g2)."""
    row = reference("T01-gain-01")
    ratio = 10 ** (row["inputs"]["ER_raw_dB"] / 10)
    found = two_port(ratio, 1.0, gain_ratio=row["inputs"]["gain_par_over_gain_cross"])
    np.testing.assert_allclose(found.er_db, row["expected"], **close(row))


def test_leaky_splitter_is_inverted():
    """T01-leak: raw 16.49 dB, true 26.99 dB; the uncertainty is that of the small recovered power."""
    row = reference("T01-leak-06")
    x = row["inputs"]
    raw = two_port(x["V_par"], x["V_cross"])
    np.testing.assert_allclose(raw.er_db, reference("T01-leak-02")["expected"], rtol=1e-9)
    found = two_port(x["V_par"], x["V_cross"], leakage=x["M"], floor1=x["u_V_par"], floor2=x["u_V_cross"])
    np.testing.assert_allclose([found.wanted_power[0], found.other_power[0]], reference("T01-leak-03")["expected"], rtol=1e-10)
    np.testing.assert_allclose(found.er_sigma_db, row["expected"], **close(row))


def test_wanted_port_2_turns_the_sign():
    one, two = two_port(1e-3, 1e-5), two_port(1e-3, 1e-5, wanted_port=2)
    np.testing.assert_allclose(two.er_db, -one.er_db)
    np.testing.assert_allclose(np.degrees(two.angle_rad), 180.0 - np.degrees(one.angle_rad))
    np.testing.assert_allclose(two.power_w, one.power_w)


def test_wanted_port_at_floor_bounds_the_angle_from_below():
    found = two_port(0.0, 1e-3, floor1=1e-9, floor2=1e-9)
    assert found.is_upper_bound[0] and found.angle_is_lower_bound[0] and not found.angle_is_upper_bound[0]


def test_dbm_is_made_linear_before_the_zero():
    """-30 dBm is 1 uW; the zero of a dBm tap is given in W."""
    found = two_port(0.0, -30.0, "dBm", zero2=0.3e-6)
    np.testing.assert_allclose(found.er_db, 31.55, atol=0.005)
    np.testing.assert_allclose(found.power_w, 1e-3 + 0.7e-6)


@pytest.mark.parametrize(("unit", "factor"), [("W", 1.0), ("mW", 1e3), ("uW", 1e6)])
def test_the_same_light_in_any_unit(unit, factor):
    found = two_port(1e-3 * factor, 1e-6 * factor, unit, zero2=0.3e-6 * factor, floor2=1e-8 * factor)
    np.testing.assert_allclose([found.er_db[0], found.power_w[0]], [31.549019599857433, 1.0007e-3], rtol=1e-9)
    np.testing.assert_allclose(found.er_sigma_db, 4.342944819 * 1e-8 / 0.7e-6, rtol=1e-6)


def test_volts_give_a_ratio_but_no_power():
    found = two_port(2.0, 0.002, "V")
    np.testing.assert_allclose(found.er_db, 30.0)
    assert np.isnan(found.power_w[0]) and found.trust[POWER][0] == Trust.NONE and found.trust[ER][0] == Trust.TRUSTED
    assert found.trust[DOP][0] == Trust.NONE and np.isnan(found.dop[0])


def test_spread_counts_as_standard_error_of_the_averaged_samples():
    """GUM: the mean of n samples of spread s has standard uncertainty s / sqrt(n), added in squares to the floor."""
    extra = {"port2_sd": np.array([4e-8]), "averaged": np.array([16.0])}
    found = two_port(1e-3, 1e-6, floor2=2e-8, extra=extra)
    np.testing.assert_allclose(found.er_sigma_db, 4.342944819 * np.hypot(1e-8, 2e-8) / 1e-6, rtol=1e-9)
    unknown = two_port(1e-3, 1e-6, floor2=2e-8, extra={"port2_sd": np.array([4e-8])})
    np.testing.assert_allclose(unknown.er_sigma_db, 4.342944819 * 2e-8 / 1e-6, rtol=1e-9)


def test_spread_of_a_dbm_port_is_in_decibels():
    extra = {"port2_sd": np.array([0.1]), "averaged": np.array([1.0])}
    np.testing.assert_allclose(two_port(0.0, -30.0, "dBm", extra=extra).er_sigma_db, 0.1, rtol=1e-9)


@pytest.mark.parametrize("saturated", [{"saturation1": 1e-3}, {"saturation2": 1e-6}])
def test_a_reading_at_its_saturation_is_untrusted(saturated):
    found = two_port(1e-3, 1e-6, **saturated)
    assert all(found.trust[quantity][0] == Trust.UNTRUSTED for quantity in (ER, ANGLE, POWER))
    assert found.reasons[ER][0] == Reason.SATURATED
    assert two_port(0.99e-3, 0.99e-6, **saturated).trust[ER][0] == Trust.TRUSTED


def test_saturation_is_of_the_raw_reading_not_the_net():
    assert two_port(1e-3, 1e-6, saturation1=1e-3, zero1=1e-4).trust[ER][0] == Trust.UNTRUSTED


def test_clipped_is_believed():
    found = two_port([1e-3, 1e-3], [1e-6, 1e-6], extra={"clipped": np.array([1.0, 0.0])})
    assert found.trust[ER].tolist() == [Trust.UNTRUSTED, Trust.TRUSTED]


def test_dark_invalidates_er_never_power():
    found = two_port(1e-9, -1e-9, floor1=1e-9, floor2=1e-9)
    assert np.isnan(found.er_db[0]) and found.trust[ER][0] == Trust.UNTRUSTED and found.reasons[ER][0] == Reason.DARK
    assert found.trust[POWER][0] == Trust.TRUSTED and found.power_w[0] == 0.0


def test_net_below_zero_without_floor_is_undefined_with_a_reason():
    found = two_port(1e-3, 1e-6, zero2=2e-6)
    assert np.isnan(found.er_db[0]) and found.reasons[ER][0] == Reason.NEGATIVE and found.trust[ER][0] == Trust.UNTRUSTED
    assert found.trust[POWER][0] == Trust.TRUSTED


def test_lost_reading_is_impossible():
    found = two_port([np.nan, 1e-3, np.inf], [1e-6, np.nan, 1e-6])
    assert (found.trust[ER] == Trust.UNTRUSTED).all() and (found.reasons[POWER] & Reason.IMPOSSIBLE).all()


def test_marks_of_the_caller_hold_for_every_quantity():
    found = two_port(
        [1e-3, 1e-3], [1e-6, 1e-6], context=TrustContext(marks=np.array([Reason.TWO_DEVICES, Reason.CLOCK_FUTURE], np.uint32))
    )
    assert found.trust[ER].tolist() == found.trust[POWER].tolist() == [Trust.UNTRUSTED, Trust.DOUBTFUL]


def test_frozen_dark_port_spoils_er_and_not_power():
    flat = np.array([[False, True], [True, False], [False, False]])
    found = two_port([1e-3] * 3, [1e-6] * 3, context=TrustContext(is_flat=flat))
    assert found.trust[ER].tolist() == [Trust.UNTRUSTED, Trust.UNTRUSTED, Trust.TRUSTED]
    assert found.trust[POWER].tolist() == [Trust.TRUSTED, Trust.UNTRUSTED, Trust.TRUSTED]
    assert found.reasons[ANGLE][0] == Reason.FLAT


def test_dark_port_with_monitor():
    """Bright power = monitor x monitor_ratio: 10 uW x 99 over 0.99 uW is 30 dB."""
    found = dark_port(0.99e-6, monitor=10e-6, monitor_ratio=99.0)
    np.testing.assert_allclose(found.er_db, 30.0)
    assert found.trust[ER][0] == Trust.TRUSTED
    zeroed = dark_port(0.99e-6, monitor=11e-6, monitor_ratio=99.0, zero1=1e-6)
    np.testing.assert_allclose(zeroed.er_db, 30.0)


def test_dark_port_with_declared_bright_power_is_doubtful():
    found = dark_port(1e-6, bright_nominal=1e-3)
    np.testing.assert_allclose(found.er_db, 30.0)
    assert found.trust[ER][0] == found.trust[ANGLE][0] == found.trust[POWER][0] == Trust.DOUBTFUL
    assert found.reasons[ER][0] == Reason.DECLARED_BRIGHT


def test_monitor_is_taken_before_the_declared_power():
    found = dark_port([1e-6, 1e-6], monitor=[1e-5, np.nan], monitor_ratio=1000.0, bright_nominal=1e-3)
    np.testing.assert_allclose(found.er_db, [40.0, 30.0])
    assert found.trust[ER].tolist() == [Trust.TRUSTED, Trust.DOUBTFUL]


def test_dark_port_without_any_bright_power_has_no_ratio():
    found = dark_port(1e-6)
    assert np.isnan(found.er_db[0]) and found.trust[ER][0] == Trust.NONE and found.reasons[ER][0] == Reason.NO_BRIGHT


def test_dark_port_at_floor_is_a_bound():
    found = dark_port(0.0, monitor=10e-6, monitor_ratio=100.0, floor2=1e-9)
    assert found.is_lower_bound[0]
    np.testing.assert_allclose(found.er_db, 57.08, atol=0.01)


def test_leak_into_the_dark_port_is_taken_off():
    """c = 0.1 % of the bright light in the dark port hides a true 40 dB behind 29.6 dB (leaky splitter, T01-leak)."""
    bright, other = 1e-3, 1e-7
    seen = 0.001 * bright + 0.999 * other
    found = dark_port(seen, bright_nominal=bright, leakage=[[0.999, 0.001], [0.001, 0.999]])
    np.testing.assert_allclose(found.er_db, 40.0, rtol=1e-9)


def test_missing_column_and_unknown_kind_are_named():
    with pytest.raises(ValueError, match="two-port tap needs column 'port2'"):
        reduce_tap("two-port", "W", np.zeros(1, np.int64), {"port1": np.ones(1)}, TapCalibration())
    with pytest.raises(ValueError, match="kind='three-port' is unknown"):
        reduce_tap("three-port", "W", np.zeros(1, np.int64), {}, TapCalibration())


def test_climate_passes_through():
    found = reduce_tap(
        "climate",
        "",
        np.zeros(1, np.int64),
        {"temperature_c": np.array([21.4]), "pressure_hpa": np.array([997.6])},
        TapCalibration(),
    )
    assert found.temperature_c[0] == 21.4 and found.pressure_hpa[0] == 997.6 and np.isnan(found.humidity_pct[0])
    assert np.isnan(found.er_db[0]) and found.trust[ER][0] == Trust.NONE and found.sop is None


@given(
    st.lists(
        st.tuples(powers_w, powers_w, st.floats(0.0, 1e-6), st.floats(0.5, 2.0), st.sampled_from([1, 2])), min_size=1, max_size=8
    )
)
def test_many_taps_in_one_call_equal_one_call_each(rows):
    """Calibration fields of shape (N,): the pipeline reduces all taps of a kind at once."""
    port1, port2, zero, gain, wanted = (np.array(column) for column in zip(*rows, strict=True))
    cal = TapCalibration(zero2=zero, gain_ratio=gain, wanted_port=wanted, floor2=zero / 3)
    together = two_port(port1, port2, cal=cal)
    for k, (a, b, z, g, w) in enumerate(rows):
        alone = two_port(a, b, zero2=z, gain_ratio=g, wanted_port=w, floor2=z / 3)
        for name in ("er_db", "er_sigma_db", "power_w", "angle_rad", "is_lower_bound", "is_upper_bound"):
            np.testing.assert_array_equal(getattr(together, name)[k], getattr(alone, name)[0])
        assert together.reasons[ER][k] == alone.reasons[ER][0]


@given(powers_w, powers_w, st.floats(0.6, 1.0), st.floats(0.6, 1.0))
def test_leakage_forward_and_back(wanted, other, a, d):
    """Readings made with a splitter's matrix come back as the powers that made them."""
    matrix = np.array([[a, 1 - d], [1 - a, d]])
    readings = matrix @ np.array([wanted, other])
    found = two_port(readings[0], readings[1], leakage=matrix)
    np.testing.assert_allclose(
        [found.wanted_power[0], found.other_power[0]], [wanted, other], rtol=1e-6, atol=1e-12 * (wanted + other) * 1e3
    )
