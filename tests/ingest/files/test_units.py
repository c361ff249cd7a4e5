import numpy as np
import pytest

from ingest.files.units import conversion, is_difference, units_for


@pytest.mark.parametrize(("column", "unit", "tap_unit", "theirs", "ours"), [
    ("port1", "uW", "mW", 1.0, 1e-3),
    ("port1", "W", "uW", 1.0, 1e6),
    ("port1", "dBm", "mW", 0.0, 1.0),               # definition of dBm: 10 log10(P / 1 mW)
    ("port1", "dBm", "W", -30.0, 1e-6),
    ("port1", "dBm", "dBm", -30.0, -30.0),
    ("temperature_c", "K", "mW", 273.15, 0.0),      # t/degC = T/K - 273.15 (SI brochure, 9th ed., from memory)
    ("temperature_c", "degF", "mW", 212.0, 100.0),  # boiling point of water, from memory
    ("pressure_hpa", "Pa", "", 101_325.0, 1013.25), # standard atmosphere, 101 325 Pa (10th CGPM, 1954, from memory)
    ("pressure_hpa", "kPa", "", 101.325, 1013.25),
    ("humidity_pct", "1", "", 0.5, 50.0),
    ("azimuth_deg", "rad", "mW", np.pi / 4, 45.0),
    ("dop", "%", "mW", 123.42, 1.2342),
    ("drive_ma", "A", "mW", 0.15, 150.0),
])
def test_units_become_ours(column, unit, tap_unit, theirs, ours):
    np.testing.assert_allclose(conversion(column, unit, tap_unit)(np.array([theirs])), [ours], rtol=1e-12, atol=1e-12)


def test_a_difference_has_no_logarithm():
    assert is_difference("s1") and "dBm" not in units_for("s1", "mW")
    assert "dBm" in units_for("s0", "mW")


@pytest.mark.parametrize("tap_unit", ["V", "count", "dBm"])
def test_volts_counts_and_dbm_are_taken_as_they_are(tap_unit):
    assert units_for("port1", tap_unit) == [tap_unit]
    with pytest.raises(KeyError):
        conversion("port1", "mW", tap_unit)
