"""Allan deviation with gaps."""

import allantools
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift.allan import allan_deviation, bin_means
from tests.reference.values import close, reference

S = 1_000_000


def lcg_1000():
    """The 1000-point set of NIST SP 1065 (2008), sec. 12.4."""
    return lcg_values(1000)


def lcg_values(count):
    """n(i+1) = 16807 n(i) mod (2^31 - 1), n0 = 1234567890, over the modulus; n0 included."""
    n, values = 1234567890, []
    for _ in range(count):
        values.append(n / 2147483647)
        n = 16807 * n % 2147483647
    return np.array(values)


def test_the_nine_point_set():
    row = reference("T04-nbs9-adev")
    level = np.array(row["inputs"]["y"], float)
    found = [allan_deviation(np.arange(9) * S, level, m).deviation for m in row["inputs"]["m"]]
    # The handbook leaves out the ninth point at tau = 2, which would be half a bin.
    found[1] = allan_deviation(np.arange(8) * S, level[:8], 2).deviation
    np.testing.assert_allclose(found, row["expected"], **close(row))


def test_the_thousand_point_set():
    row = reference("T04-lcg1000-adev")
    found = [allan_deviation(np.arange(1000) * S, lcg_1000(), m).deviation for m in row["inputs"]["m"]]
    np.testing.assert_allclose(found, row["expected"], **close(row))


@given(st.integers(0, 2**32 - 1), st.sampled_from([1, 2, 5, 10]))
def test_without_gaps_it_is_the_plain_allan_deviation(seed, m):
    """allantools (open library): adev of frequency-type data."""
    level = np.cumsum(np.random.default_rng(seed).normal(size=200))
    _, expected, _, pairs = allantools.adev(level, rate=1.0, data_type="freq", taus=[m])
    found = allan_deviation(np.arange(200) * S, level, float(m))
    np.testing.assert_allclose(found.deviation, expected[0], rtol=1e-9)
    assert found.pairs == 200 // m - 1


@pytest.mark.parametrize("name", ["T04-drift-m1", "T04-drift-m7", "T04-drift-m50"])
def test_linear_drift_rises_with_tau(name):
    row = reference(name)
    x = row["inputs"]
    count = x["n"] // x["m"] * x["m"]
    found = allan_deviation(np.arange(count) * S, x["D_per_sample"] * np.arange(count), x["m"])
    np.testing.assert_allclose(found.deviation, row["expected"], **close(row))


def test_a_gap_breaks_the_chain_and_is_not_closed_up():
    at_us = np.array([0, 1, 2, 10, 11]) * S
    level = np.array([0.0, 0.0, 0.0, 100.0, 100.0])
    found = allan_deviation(at_us, level, 1.0)
    assert found.deviation == 0.0 and found.pairs == 3


def test_no_pair_no_figure():
    found = allan_deviation(np.array([0, 5]) * S, np.zeros(2), 1.0)
    assert np.isnan(found.deviation) and found.pairs == 0
    assert np.isnan(allan_deviation(np.zeros(0, np.int64), np.zeros(0), 1.0).deviation)
    with pytest.raises(ValueError, match="must be above 0"):
        allan_deviation(np.array([0]), np.zeros(1), 0.0)


def test_means_of_vectors_by_bin():
    number, means = bin_means(np.array([0, 1, 5]), np.array([[1.0, 0.0], [0.0, 1.0], [2.0, 2.0]]), 2)
    assert number.tolist() == [0, 2]
    np.testing.assert_allclose(means, [[0.5, 0.5], [2.0, 2.0]])
