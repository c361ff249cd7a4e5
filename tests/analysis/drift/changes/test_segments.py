"""Changes of level found afterwards."""

import numpy as np
import pytest
import ruptures
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from analysis.drift.changes.segments import halved, segments, single_change, usual_penalty
from tests.reference.values import close, reference


@pytest.fixture(scope="module")
def nile():
    return sm.datasets.nile.load_pandas().data["volume"].to_numpy()


def test_nile_changes_after_1898(nile):
    means, least = reference("T06-nile-means"), reference("T06-nile-ls")
    found = single_change(nile)
    assert found.index == least["expected"]["n1"] and 1870 + found.index == least["expected"]["last_year_before"]
    np.testing.assert_allclose(found.squares, least["expected"]["SSE"], **close(least))
    wanted = [means["expected"]["mean1"], means["expected"]["mean2"]]
    np.testing.assert_allclose([found.before, found.after], wanted, **close(means))
    assert segments(nile) == halved(nile) == [28]
    assert abs(found.after - found.before) > 3.5 * found.standard_error
    assert found.low_index <= 28 <= found.high_index and found.high_index - found.low_index < 20


def test_cumulative_deviation_of_the_nile(nile):
    """The largest one lies where least squares puts the change: 28 (mean of the first 28 - mean)."""
    row = reference("T06-nile-cusumdev")
    found = single_change(nile)
    np.testing.assert_allclose(found.index * (found.before - nile.mean()), row["expected"]["value"], **close(row))


def course(seed, changes, count=200, size=2.0):
    random = np.random.default_rng(seed)
    cut = np.sort(random.choice(np.arange(5, count - 5), changes, replace=False))
    return random.normal(size=count) + size * np.sum(np.arange(count)[:, None] >= cut, axis=1) * random.choice([-1, 1])


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10_000), st.integers(0, 6), st.floats(2.0, 60.0), st.sampled_from([1, 2, 5]))
def test_segments_reach_the_least_cost(seed, changes, penalty, least):
    """ruptures (open library): Dynp gives the least squares for each number of changes."""
    level = course(seed, changes)
    found = segments(level, penalty, least=least)
    search = ruptures.Dynp(model="l2", min_size=least, jump=1).fit(level)
    cost = [search.cost.sum_of_costs([len(level)])]
    cost += [search.cost.sum_of_costs(search.predict(n_bkps=n)) + n * penalty for n in range(1, len(found) + 3)]
    mine = search.cost.sum_of_costs([*found, len(level)]) + len(found) * penalty
    assert mine == pytest.approx(min(cost), rel=1e-9)


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 10_000), st.floats(5.0, 60.0))
def test_halving_is_binary_segmentation(seed, penalty):
    level = course(seed, 3)
    expected = ruptures.Binseg(model="l2", min_size=2, jump=1).fit(level).predict(pen=penalty)[:-1]
    assert halved(level, penalty) == expected


@pytest.mark.parametrize("rho", [0.0, 0.6])
def test_noise_alone_seldom_shows_a_change(rho):
    series = signal.lfilter([1.0], [1.0, -rho], np.random.default_rng(3).normal(size=(200, 400)), axis=1)[:, 50:]
    assert np.mean([len(segments(row)) > 0 for row in series]) < 0.1


def test_without_the_correction_autocorrelated_noise_is_full_of_changes():
    series = signal.lfilter([1.0], [1.0, -0.6], np.random.default_rng(3).normal(size=(50, 400)), axis=1)[:, 50:]
    assert np.mean([len(segments(row, 2 * np.var(row) * np.log(350))) > 0 for row in series]) > 0.5


def test_the_interval_holds_the_true_place():
    """Simulation: steps of 1.5 standard deviations at 100 of 200."""
    random = np.random.default_rng(4)
    hold = [single_change(random.normal(size=200) + 1.5 * (np.arange(200) >= 100)) for _ in range(400)]
    assert 0.93 <= np.mean([one.low_index <= 100 <= one.high_index for one in hold]) <= 1.0
    steps = np.array([(one.after - one.before - 1.5) / one.standard_error for one in hold])
    assert 0.8 < steps.std() < 1.2


def test_short_and_wrong_levels():
    assert segments(np.zeros(3)) == [] and halved(np.zeros(3)) == []
    assert segments(np.ones(50)) == [] and usual_penalty(np.ones(50)) == 0.0
    with pytest.raises(ValueError, match="3 finite readings"):
        single_change(np.array([1.0, np.nan, 2.0]))
    with pytest.raises(ValueError, match="least=0"):
        segments(np.zeros(9), least=0)
