"""Overlapping and modified Allan deviation: published sets, allantools, gaps."""

import allantools
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift.allan_curve import (
    as_time_deviation,
    modified_allan_deviation,
    octaves,
    overlapping_allan_deviation,
    time_deviation,
)
from tests.reference.aligned import aligned
from tests.reference.lcg import lcg_1000
from tests.reference.values import close, reference, references

S = 1_000_000
PAIRS = ((overlapping_allan_deviation, allantools.oadev), (modified_allan_deviation, allantools.mdev),
         (time_deviation, allantools.tdev))


@pytest.mark.parametrize(("name", "function"), [("oadev", overlapping_allan_deviation), ("tdev", time_deviation)])
def test_published_sets(name, function):
    """NIST SP 1065 (2008), sec. 12.4, pp. 107-108, as quoted in the tests of allantools."""
    nine, thousand = reference(f"T04-nbs9-{name}"), reference(f"T04-lcg1000-{name}")
    found = function(np.array(nine["inputs"]["y"], float), 1.0, np.array(nine["inputs"]["m"])).deviation
    np.testing.assert_allclose(found, nine["expected"], **close(nine))
    found = function(lcg_1000(), 1.0, np.array(thousand["inputs"]["m"])).deviation
    np.testing.assert_allclose(found, thousand["expected"], **close(thousand))


@given(st.integers(0, 2**32 - 1), st.integers(30, 400), st.sampled_from([0, 1, 2]), st.booleans())
def test_equals_allantools(seed, count, kind, in_octaves):
    """Noise, random walk and noise on a steep drift, at octaves and at other factors."""
    rng = np.random.default_rng(seed)
    level = rng.standard_normal(count)
    level = (level, np.cumsum(level), level + 100.0 * np.arange(count))[kind]
    factors = octaves(count // 2) if in_octaves else np.unique([1, 3, 4, count // 6])
    for ours, theirs in PAIRS:
        found = ours(level, 0.5, factors)
        tau_s, expected, _, terms = theirs(level, rate=2.0, data_type="freq", taus=factors * 0.5)
        keep = np.isin(found.tau_s, tau_s)
        np.testing.assert_allclose(found.deviation[keep], expected, rtol=1e-8, atol=1e-12)
        np.testing.assert_array_equal(found.terms[keep], terms)


@pytest.mark.parametrize("row", references("T04-drift-m"), ids=lambda row: row["id"])
def test_linear_drift(row):
    x = row["inputs"]
    found = overlapping_allan_deviation(x["D_per_sample"] * np.arange(x["n"]), 1.0, np.array([x["m"]]))
    np.testing.assert_allclose(found.deviation, [row["expected"]], **close(row))


def test_expected_values_of_a_random_walk():
    """Exact: σ² = q² (2 m² + 1)/(6 m); mean over 300 walks."""
    row = reference("T04-rw-m4")
    steps = row["inputs"]["q"] * np.random.default_rng(1).standard_normal((4000, 300))
    found = overlapping_allan_deviation(np.cumsum(steps, axis=0), 1.0, np.array([row["inputs"]["m"]])).deviation
    np.testing.assert_allclose(np.sqrt(np.mean(found**2)), row["expected"], **close(row))


@given(st.integers(0, 2**32 - 1))
def test_a_gap_splits_and_is_never_closed_up(seed):
    """With whole means only, squares and terms are those of the two stretches on their own."""
    rng = np.random.default_rng(seed)
    first, second = np.cumsum(rng.standard_normal(60)), 50.0 + rng.standard_normal(41)
    whole = np.concatenate([first, [np.nan] * 3, second])
    factors = np.array([1, 2, 4, 8])
    for function in (overlapping_allan_deviation, modified_allan_deviation):
        parts = [function(part, 1.0, factors) for part in (first, second)]
        found = function(whole, 1.0, factors)
        terms = parts[0].terms + parts[1].terms
        square = sum(part.terms * part.deviation**2 for part in parts) / terms
        np.testing.assert_array_equal(found.terms, terms)
        np.testing.assert_allclose(found.deviation, np.sqrt(square), rtol=1e-9)


def test_partly_filled_means_count_from_the_least_share_on():
    level = np.arange(40.0)
    level[[5, 22]] = np.nan
    strict, loose = (overlapping_allan_deviation(level, 1.0, np.array([8]), least_share=share) for share in (1.0, 0.8))
    assert strict.terms[0] < loose.terms[0] == 25
    np.testing.assert_allclose(loose.deviation, 8.0 / np.sqrt(2.0), rtol=0.05)


def test_components_are_those_of_each_and_terms_are_shared():
    rng = np.random.default_rng(3)
    level = rng.standard_normal((200, 3))
    for function in (overlapping_allan_deviation, modified_allan_deviation, time_deviation):
        each = np.stack([function(level[:, k], 2.0).deviation for k in range(3)], axis=1)
        np.testing.assert_allclose(function(level, 2.0).deviation, each, rtol=1e-12)
    level[7, 1] = np.nan
    assert overlapping_allan_deviation(level, 2.0).terms[0] == 197


def test_the_nine_point_set():
    row = reference("T04-nbs9-adev")
    level = np.array(row["inputs"]["y"], float)
    found = [aligned(np.arange(9) * S, level, m)[0] for m in row["inputs"]["m"]]
    # The handbook leaves out the ninth point at tau = 2, which would be half a bin.
    found[1] = aligned(np.arange(8) * S, level[:8], 2)[0]
    np.testing.assert_allclose(found, row["expected"], **close(row))


def test_the_thousand_point_set():
    row = reference("T04-lcg1000-adev")
    found = [aligned(np.arange(1000) * S, lcg_1000(), m)[0] for m in row["inputs"]["m"]]
    np.testing.assert_allclose(found, row["expected"], **close(row))


@given(st.integers(0, 2**32 - 1), st.sampled_from([1, 2, 5, 10]))
def test_without_gaps_it_is_the_plain_allan_deviation(seed, m):
    """allantools (open library): adev of frequency-type data."""
    level = np.cumsum(np.random.default_rng(seed).normal(size=200))
    _, expected, _, pairs = allantools.adev(level, rate=1.0, data_type="freq", taus=[m])
    found = aligned(np.arange(200) * S, level, float(m))
    np.testing.assert_allclose(found[0], expected[0], rtol=1e-9)
    assert found[1] == 200 // m - 1


@pytest.mark.parametrize("name", ["T04-drift-m1", "T04-drift-m7", "T04-drift-m50"])
def test_linear_drift_rises_with_tau(name):
    row = reference(name)
    x = row["inputs"]
    count = x["n"] // x["m"] * x["m"]
    found = aligned(np.arange(count) * S, x["D_per_sample"] * np.arange(count), x["m"])
    np.testing.assert_allclose(found[0], row["expected"], **close(row))


def test_a_gap_breaks_the_chain_and_is_not_closed_up():
    at_us = np.array([0, 1, 2, 10, 11]) * S
    level = np.array([0.0, 0.0, 0.0, 100.0, 100.0])
    found = aligned(at_us, level, 1.0)
    assert found[0] == 0.0 and found[1] == 3


def test_no_pair_no_figure():
    found = aligned(np.array([0, 5]) * S, np.zeros(2), 1.0)
    assert np.isnan(found[0]) and found[1] == 0
    assert np.isnan(aligned(np.zeros(0, np.int64), np.zeros(0), 1.0)[0])
    with pytest.raises(ValueError, match="must be above 0"):
        aligned(np.array([0]), np.zeros(1), 0.0)


def test_too_short_and_faults():
    assert len(octaves(1)) == 0 and octaves(9).tolist() == [1, 2, 4]
    none = overlapping_allan_deviation(np.zeros(3), 1.0, np.array([2]))
    assert np.isnan(none.deviation[0]) and none.terms[0] == 0
    assert len(overlapping_allan_deviation(np.zeros(0), 1.0).deviation) == 0
    assert np.isnan(overlapping_allan_deviation(np.full(4, np.nan), 1.0).deviation).all()
    for bad in ({"interval_s": 0.0}, {"interval_s": 1.0, "factors": np.array([0])}, {"interval_s": 1.0, "least_share": 0.0}):
        with pytest.raises(ValueError, match="must be"):
            overlapping_allan_deviation(np.zeros(8), **bad)
    with pytest.raises(ValueError, match="shape"):
        modified_allan_deviation(np.zeros((2, 2, 2)), 1.0)
    with pytest.raises(ValueError, match="modified"):
        as_time_deviation(overlapping_allan_deviation(np.arange(9.0), 1.0))
