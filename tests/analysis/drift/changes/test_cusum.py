"""Tabular CUSUM."""

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from analysis.drift.changes.cusum import tabular_cusum
from tests.reference.values import close, reference


@pytest.mark.parametrize(("name", "side"), [("T06-cusum-hi", "high"), ("T06-cusum-lo", "low")])
def test_handbook_columns(name, side):
    row = reference(name)
    x = row["inputs"]
    found = getattr(tabular_cusum(np.array(x["x"]), x["target"], x["k"]), side)
    np.testing.assert_allclose(found, row["expected"], **close(row))


def test_handbook_signals():
    row = reference("T06-cusum-exact")
    x, expected = row["inputs"], row["expected"]
    sums = tabular_cusum(np.array(x["x"]), x["target"], x["k"])
    high, low = sums.signals(x["h"])
    np.testing.assert_allclose([sums.high[-1], sums.low.max()], [expected["S_hi_20"], expected["max_S_lo"]], **close(row))
    assert np.flatnonzero(high)[0] + 1 == expected["first_signal_group"]
    assert high.sum() == expected["signals"] and not low.any()


def test_concentration_example():
    row = reference("T06-cusum-conc")
    x = row["inputs"]
    sums = tabular_cusum(np.array(x["x"]), x["target"], x["K"])
    np.testing.assert_allclose(sums.high, row["expected"]["S_H"], **close(row))
    np.testing.assert_allclose(sums.low, row["expected"]["S_L"], **close(row))


def test_nile_signals_four_years_late():
    row = reference("T06-nile-tabcusum")
    flow = sm.datasets.nile.load_pandas().data["volume"].to_numpy()
    mean, sd = flow[:28].mean(), flow[:28].std(ddof=1)
    low = tabular_cusum((flow - mean) / sd, 0.0, row["inputs"]["k"]).low
    first = int(np.flatnonzero(low > row["inputs"]["h"])[0])
    assert 1871 + first == row["expected"]["year"]
    np.testing.assert_allclose(low[first], row["expected"]["S_lo"], **close(row))


levels = hnp.arrays(np.float64, st.integers(0, 60), elements=st.floats(-5, 5))


@given(levels, st.floats(0, 2))
def test_it_is_the_recursion(level, slack):
    high = low = 0.0
    found = tabular_cusum(level, 0.5, slack)
    for k, x in enumerate(level):
        high, low = max(0.0, high + x - 0.5 - slack), max(0.0, low + 0.5 - x - slack)
        assert found.high[k] == pytest.approx(high, abs=1e-9) and found.low[k] == pytest.approx(low, abs=1e-9)


@given(levels)
def test_turned_upside_down_the_sums_change_places(level):
    one, other = tabular_cusum(level, 1.0, 0.3), tabular_cusum(-level, -1.0, 0.3)
    np.testing.assert_allclose(one.high, other.low, atol=1e-12)


def test_nan_holds_the_sums_and_wrong_settings_are_refused():
    found = tabular_cusum(np.array([2.0, np.nan, 2.0]), 0.0, 0.5)
    assert found.high.tolist() == [1.5, 1.5, 3.0]
    with pytest.raises(ValueError, match="slack=-1"):
        tabular_cusum(np.zeros(1), 0.0, -1)
    with pytest.raises(ValueError, match="limit=0"):
        found.signals(0)
