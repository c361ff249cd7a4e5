"""Average run lengths of control charts."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from analysis.drift.changes.cusum import tabular_cusum
from analysis.drift.changes.ewma import ewma
from analysis.drift.changes.run_length import (
    cusum_limit,
    cusum_run_length,
    cusum_run_length_ar1,
    ewma_reach,
    ewma_run_length,
    prewhitened,
    two_sided_cusum_run_length,
)
from tests.reference.values import close, reference, references


@pytest.mark.parametrize("row", references("T06-arl-h"), ids=lambda row: row["id"])
def test_two_sided_cusum(row):
    x = row["inputs"]
    np.testing.assert_allclose(two_sided_cusum_run_length(x["k"], x["h"], x["shift_sigma"]), row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T06-arl-onesided"), ids=lambda row: row["id"])
def test_one_sided_cusum(row):
    np.testing.assert_allclose(cusum_run_length(row["inputs"]["k"], row["inputs"]["h"]), row["expected"], **close(row))


def test_head_start():
    row = reference("T06-arl-fir")
    x = row["inputs"]
    found = [cusum_run_length(x["k"], x["h"], shift, head_start=x["S0"]) for shift in x["shift"]]
    np.testing.assert_allclose(found, row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T06-ewma-arl"), ids=lambda row: row["id"])
def test_ewma(row):
    x = row["inputs"]
    found = [ewma_run_length(x["lambda"], x["L"], shift) for shift in (0.0, 1.0)]
    np.testing.assert_allclose(found, row["expected"], **close(row))


@settings(max_examples=20, deadline=None)
@given(st.floats(0.1, 1.0), st.floats(20, 1e6))
def test_the_limit_for_a_run_length_gives_that_run_length(k, run_length):
    assert two_sided_cusum_run_length(k, cusum_limit(k, run_length)) == pytest.approx(run_length, rel=1e-6)


@settings(max_examples=15, deadline=None)
@given(st.floats(0.05, 1.0), st.floats(10, 1e5))
def test_the_reach_for_a_run_length_gives_that_run_length(weight, run_length):
    assert ewma_run_length(weight, ewma_reach(weight, run_length)) == pytest.approx(run_length, rel=1e-6)


def test_an_ewma_of_weight_1_is_a_plain_chart():
    """Each reading on its own: 1/(2 Φ(-3)) = 370.4."""
    assert ewma_run_length(1.0, 3.0) == pytest.approx(370.398, rel=1e-5)


def runs(series, chart):
    """Mean first signal, readings, of the rows that signal; all do."""
    first = np.array([np.argmax(chart(row)) for row in series])
    return np.mean(first + 1), np.std(first + 1) / np.sqrt(len(first))


@pytest.mark.parametrize("shift", [0.5, 1.0])
def test_simulated_runs_agree(shift):
    series = shift + np.random.default_rng(1).normal(size=(1000, 400))
    mean, error = runs(series, lambda row: np.maximum(*vars_of(row)) > 4.0)
    assert mean == pytest.approx(two_sided_cusum_run_length(0.5, 4.0, shift), abs=4 * error)
    mean, error = runs(series, lambda row: np.abs(ewma(row, 0.1, 0.0)) > 2.814 * np.sqrt(0.1 / 1.9))
    assert mean == pytest.approx(ewma_run_length(0.1, 2.814, shift), abs=4 * error)


def vars_of(row):
    sums = tabular_cusum(row, 0.0, 0.5)
    return sums.high, sums.low


def test_autocorrelation_shortens_runs_and_whitening_mends_them():
    """T06-arl-autocorr: 51 in place of 465 readings between false alarms at ρ = 0.5."""
    row = reference("T06-arl-autocorr")
    np.testing.assert_allclose(cusum_run_length_ar1(0.5, 5.0, row["inputs"]["rho"]), row["expected"], **close(row))
    noise = np.random.default_rng(2).normal(size=(200, 6000))
    noise[:, 1:] *= np.sqrt(0.75)
    series = signal.lfilter([1.0], [1.0, -0.5], noise, axis=1)
    mean, error = runs(series, lambda row: np.maximum(*vars_of(row)) > 5.0)
    assert mean == pytest.approx(row["expected"], abs=4 * error + 3)
    mean, error = runs(series, lambda row: np.maximum(*vars_of(prewhitened(row, 0.0, 0.5))) > 5.0)
    assert mean == pytest.approx(465.4, abs=4 * error)


def test_no_autocorrelation_changes_nothing():
    assert cusum_run_length_ar1(0.5, 5.0, 0.0) == pytest.approx(two_sided_cusum_run_length(0.5, 5.0), rel=0.02)
    level = np.array([1.0, np.nan, 3.0, 4.0])
    np.testing.assert_array_equal(prewhitened(level, 1.0, 0.0), level - 1.0)


@pytest.mark.parametrize(
    ("call", "field"),
    [
        (lambda: cusum_run_length(-0.1, 4.0), "k=-0.1"),
        (lambda: cusum_run_length(0.5, 4.0, head_start=5.0), "head_start=5.0"),
        (lambda: cusum_limit(0.5, 1.0), "run_length=1.0"),
        (lambda: cusum_run_length_ar1(0.5, 4.0, 0.95), "rho=0.95"),
        (lambda: prewhitened(np.zeros(2), 0.0, 1.0), "rho=1.0"),
        (lambda: ewma_run_length(0.0, 3.0), "weight=0.0"),
        (lambda: ewma_reach(0.1, 1.0), "run_length=1.0"),
    ],
)
def test_wrong_settings_are_refused(call, field):
    with pytest.raises(ValueError, match=field):
        call()
