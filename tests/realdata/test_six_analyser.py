"""Three orthogonal port pairs over a spectrum: Stokes values from ports against the authors' own figures.

Source: Y. L. Gagnon, polarimetryLab (public repository, MIT licence, (c) 2015), commit 86f7544.
"""

import numpy as np
import pytest

from analysis.judge.rule import Quantity
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from analysis.reduce.trust import Reason, Trust
from tests.realdata.sets import table

pytestmark = pytest.mark.realdata


@pytest.fixture(scope="module")
def rows():
    return table("six_analyser_spectrum/spectrum.csv.gz")


@pytest.fixture(scope="module")
def reduced(rows):
    names = ("i_v", "i_h", "i_45p", "i_45m", "i_circ_1", "i_circ_2")
    v, h, p, m, c1, c2 = (rows[name].to_numpy() for name in names)
    columns = {"s0": (v + h + p + m + c1 + c2) / 3, "s1": v - h, "s2": p - m, "s3": c1 - c2}
    return reduce_tap("stokes", "count", np.arange(len(rows), dtype=np.int64), columns, TapCalibration())


@pytest.fixture(scope="module")
def unclamped(rows, reduced):
    """Rows that compare: the authors raised S0 to |S| where three neighbours had DOP over 1, and left some rows empty."""
    vector = reduced.sop * reduced.dop[:, None]
    dolp = np.hypot(vector[:, 0], vector[:, 1])
    same = np.isclose(dolp, rows["authors_dolp"].to_numpy(), rtol=0, atol=1e-12)
    return same


def test_812_rows_compare(unclamped):
    assert unclamped.sum() == 812


def test_linear_and_circular_polarization(rows, reduced, unclamped):
    docp = reduced.dop * reduced.sop[:, 2]
    assert np.max(np.abs(docp - rows["authors_docp"].to_numpy())[unclamped]) < 1e-12


def test_azimuth(rows, reduced, unclamped):
    difference = np.degrees(reduced.azimuth_rad) - rows["authors_aop_deg"].to_numpy()
    assert np.max(np.abs((difference[unclamped] + 90) % 180 - 90)) < 1e-10


def test_vector_longer_than_s0_in_188_rows_is_kept(reduced):
    """In 181 of them DOP is above 1 (doubtful, kept); in 7 the sum S0 itself is negative, so that DOP is not defined."""
    above, negative = reduced.dop > 1, np.isnan(reduced.dop)
    assert (above.sum(), negative.sum(), (above | negative).sum()) == (181, 7, 188)
    assert (reduced.trust[Quantity.DOP][above] == Trust.DOUBTFUL).all()
    assert (reduced.reasons[Quantity.DOP][negative] == Reason.NEGATIVE).all()
