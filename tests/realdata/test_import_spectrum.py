"""Three pairs of orthogonal analysers as three two-port taps, through the command and the store.

Figures: yakir12/polarimetryLab, commit 86f75442 (GitHub), polar/CP and polar/data.csv, MIT, (c) 2015 Yakir Luc Gagnon;
recomputed independently with numpy and pandas for this project. The file is not part of it.
"""

import numpy as np
import pytest

from analysis.record.reduce_span import reduced_samples
from ingest.models import Unit
from tests.factories import make_station, make_tap
from tests.realdata.sets import all_readings, imported, table

pytestmark = [pytest.mark.realdata, pytest.mark.django_db]

FILE = "six_analyser_spectrum/spectrum.csv.gz"
PAIRS = ("linear", "diagonal", "circular")
ALL_NEW = {"rows": 1000, "stored": 1000, "known": 0, "set_aside": 0, "lines_left_out": 1}


@pytest.fixture
def taps():
    station = make_station()
    taps = [make_tap(station, pair, unit=Unit.COUNT) for pair in PAIRS]
    assert [imported(tap, FILE, f"spectrum_{tap.name}.toml") for tap in taps] == [ALL_NEW] * 3
    return taps


def test_twice_changes_nothing(taps):
    before = [all_readings(tap) for tap in taps]
    for tap, kept in zip(taps, before, strict=True):
        assert imported(tap, FILE, f"spectrum_{tap.name}.toml") == ALL_NEW | {"stored": 0, "known": 1000}
        np.testing.assert_array_equal(all_readings(tap).column("port1"), kept.column("port1"))


def test_stokes_from_three_pairs_agree_with_the_authors(taps):
    """DOLP and DOCP to 1e-12, azimuth to 1e-10° in the 812 rows where they did not clamp; DOP > 1 in 188 rows."""
    pairs = [all_readings(tap) for tap in taps]
    port1, port2 = (np.stack([pair.column(name) for pair in pairs]) for name in ("port1", "port2"))
    s0 = (port1 + port2).sum(axis=0) / 3
    s1, s2, s3 = port1 - port2
    # The authors take the vertical analyser as positive S1: S1 = i_v − i_h.
    s1 = -s1
    authors = table(FILE)
    is_plain = (np.abs(authors["authors_intensity"] - s0) < 1e-12).to_numpy()
    assert is_plain.sum() == 812
    np.testing.assert_allclose((np.hypot(s1, s2) / s0)[is_plain], authors["authors_dolp"][is_plain], rtol=0, atol=1e-12)
    np.testing.assert_allclose((s3 / s0)[is_plain], authors["authors_docp"][is_plain], rtol=0, atol=1e-12)
    azimuth_deg = np.degrees(np.arctan2(s2, s1) / 2)
    np.testing.assert_allclose(azimuth_deg[is_plain], authors["authors_aop_deg"][is_plain], rtol=0, atol=1e-10)
    assert int((np.abs(np.sqrt(s1**2 + s2**2 + s3**2) / s0) > 1).sum()) == 188


def test_a_port_at_or_below_zero_gives_no_number(taps):
    """ER of one pair is 10 lg(port 1 / port 2) where both are above 0, and is not defined elsewhere."""
    rows = table(FILE)
    for tap, (one, other) in zip(taps, (("i_h", "i_v"), ("i_45p", "i_45m"), ("i_circ_1", "i_circ_2")), strict=True):
        reduced = reduced_samples(tap, 0, 2**62)
        is_lit = ((rows[one] > 0) & (rows[other] > 0)).to_numpy()
        assert 0 < (~is_lit).sum() < 1000
        er_db = 10 * np.log10((rows[one] / rows[other])[is_lit])
        np.testing.assert_allclose(reduced.er_db[is_lit], er_db, rtol=0, atol=1e-9)
        assert np.isnan(reduced.er_db[~is_lit]).all()
