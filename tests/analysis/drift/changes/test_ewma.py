"""Exponentially weighted moving average."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from analysis.drift.changes.ewma import ewma, ewma_limit, ewma_signals
from tests.reference.values import close, reference


def test_handbook_values():
    row = reference("T06-ewma-01")
    x = row["inputs"]
    np.testing.assert_allclose(ewma(np.array(x["x"]), x["lambda"], x["z0"]), row["expected"][1:], **close(row))


@given(hnp.arrays(np.float64, st.integers(1, 50), elements=st.floats(-9, 9)), st.floats(0.01, 1.0))
def test_it_is_pandas_own(level, weight):
    expected = pd.Series(np.concatenate([[2.0], level])).ewm(alpha=weight, adjust=False).mean().to_numpy()[1:]
    np.testing.assert_allclose(ewma(level, weight, 2.0), expected, atol=1e-9)


def test_limits_widen_to_the_steady_state():
    limit = ewma_limit(200, 2.0539, 0.3, 3.0)
    assert limit[0] == pytest.approx(3 * 2.0539 * 0.3)
    assert limit[-1] == pytest.approx(3 * 2.0539 * np.sqrt(0.3 / 1.7), rel=1e-12)


def test_signals_and_nan():
    level = np.array([np.nan, 0.0, np.nan, 10.0])
    assert ewma(level, 0.5, 0.0).tolist() == [0.0, 0.0, 0.0, 5.0]
    assert ewma_signals(level, 0.0, 1.0, 0.5, 3.0).tolist() == [False, False, False, True]
    assert ewma(np.array([np.nan]), 0.5, 7.0).tolist() == [7.0]
    with pytest.raises(ValueError, match="weight=0"):
        ewma(level, 0, 0.0)
