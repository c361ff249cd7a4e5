"""Brier scores against values computed apart (tests/reference/outlook.json) and the identity behind them."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.outlook.brier import brier_parts, brier_parts_binned, brier_score
from tests.reference.values import close, reference

cases = st.lists(st.tuples(st.sampled_from([0.0, 0.1, 0.25, 0.5, 0.9, 0.97, 1.0]), st.booleans()), min_size=1, max_size=40)


def test_parts_by_distinct_forecasts():
    """A. H. Murphy, J. Appl. Meteorol. 12, 595 (1973), from memory; the value in exact rationals."""
    row = reference("T08-brier-01")
    parts = brier_parts(row["inputs"]["forecast"], row["inputs"]["outcome"])
    for name, got in (("BS", parts.score), ("REL", parts.reliability), ("RES", parts.resolution), ("UNC", parts.uncertainty),
                      ("BSS", parts.skill)):
        np.testing.assert_allclose(got, row["expected"][name], **close(row))
    assert parts.within == 0.0


def test_parts_by_bins_need_the_remainder():
    """D. B. Stephenson, C. A. S. Coelho, I. T. Jolliffe, Weather Forecast. 23, 752 (2008), from memory."""
    row = reference("T08-brier-binned")
    parts = brier_parts_binned(row["inputs"]["forecast"], row["inputs"]["outcome"], row["inputs"]["bin_edges"])
    np.testing.assert_allclose(parts.score, row["expected"]["BS"], **close(row))
    grouped = parts.reliability - parts.resolution + parts.uncertainty
    np.testing.assert_allclose(grouped, row["expected"]["REL-RES+UNC"], **close(row))
    np.testing.assert_allclose(parts.within, row["expected"]["remainder"], **close(row))


@settings(deadline=None)
@given(cases, st.lists(st.floats(0.05, 0.95), max_size=4, unique=True).map(sorted))
def test_parts_add_up(pairs, edges):
    forecast, outcome = (np.array(part, float) for part in zip(*pairs, strict=True))
    for parts in (brier_parts(forecast, outcome), brier_parts_binned(forecast, outcome, edges)):
        assert parts.reliability - parts.resolution + parts.uncertainty + parts.within == pytest.approx(parts.score, abs=1e-12)
    assert brier_score(forecast, outcome) == pytest.approx(np.mean((forecast - outcome) ** 2), abs=1e-15)


def test_ends():
    """Perfect: 0. The base rate always: skill 0. All alike: no skill to speak of. No case: NaN."""
    assert brier_score([1.0, 0.0], [1, 0]) == 0.0
    assert brier_parts([0.5] * 4, [1, 0, 1, 0]).skill == pytest.approx(0.0)
    assert np.isnan(brier_parts([0.9, 0.8], [1, 1]).skill)
    assert np.isnan(brier_score([], [])) and np.isnan(brier_parts([], []).score)


def test_standard_error_is_that_of_a_mean():
    parts = brier_parts([1.0, 1.0, 1.0, 1.0], [1, 1, 1, 0])
    assert parts.standard_error == pytest.approx(np.std([0, 0, 0, 1], ddof=1) / 2.0)


@pytest.mark.parametrize(("forecast", "outcome"), [([1.2], [1]), ([np.nan], [1]), ([0.5], [0.5]), ([0.5, 0.5], [1])])
def test_other_than_chances_and_outcomes_is_refused(forecast, outcome):
    with pytest.raises(ValueError):
        brier_score(forecast, outcome)
