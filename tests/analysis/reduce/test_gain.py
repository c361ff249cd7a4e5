"""Gain ratio from one exchange of the polarizations."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.gain import gain_ratio_from_exchange
from tests.reference.values import close, reference


def test_er_and_gain_of_an_exchange():
    """T01-gain-02, -03: ER 23.98 dB and gain ratio 1.5625 from the same four readings."""
    er, gain = reference("T01-gain-02"), reference("T01-gain-03")
    x = er["inputs"]
    found = gain_ratio_from_exchange(x["Vpar_1"], x["Vcross_1"], x["Vpar_2_swapped"], x["Vcross_2_swapped"])
    np.testing.assert_allclose(found.er_db, er["expected"], **close(er))
    np.testing.assert_allclose(found.gain_ratio, gain["expected"], **close(gain))


@given(st.floats(0.1, 10.0), st.floats(1e-4, 1.0), st.floats(0.1, 10.0), st.floats(0.1, 10.0))
def test_any_gains_and_powers_are_found_again(gain, leak, power, power_exchanged):
    found = gain_ratio_from_exchange(gain * power, leak * power, gain * leak * power_exchanged, power_exchanged)
    np.testing.assert_allclose(found.gain_ratio, gain, rtol=1e-9)
    np.testing.assert_allclose(found.er_db, -10 * np.log10(leak), atol=1e-9)


def test_uncertainty_against_draws():
    random = np.random.default_rng(5)
    relative = np.array([0.01, 0.02, 0.03, 0.005])
    four = np.array([1.25, 0.0032, 0.005, 0.8])
    found = gain_ratio_from_exchange(*four, relative_sigma=relative)
    drawn = gain_ratio_from_exchange(*(four[:, None] * (1 + relative[:, None] * random.standard_normal((4, 200_000)))))
    np.testing.assert_allclose(found.gain_ratio_sigma, drawn.gain_ratio.std(), rtol=0.02)
    np.testing.assert_allclose(found.er_sigma_db, drawn.er_db.std(), rtol=0.02)


def test_one_uncertainty_for_all():
    found = gain_ratio_from_exchange(1.0, 0.1, 0.1, 1.0, relative_sigma=0.01)
    np.testing.assert_allclose([found.gain_ratio_sigma, found.er_sigma_db], [0.01, 4.342944819 * 0.01], rtol=1e-9)


def test_a_lost_reading_is_nan_and_a_dark_one_is_refused():
    assert np.isnan(gain_ratio_from_exchange(np.nan, 0.1, 0.1, 1.0).gain_ratio)
    with pytest.raises(ValueError, match="port2_exchanged is not above 0"):
        gain_ratio_from_exchange(1.0, 0.1, 0.1, 0.0)
