"""Measured Stokes runs through the command, the store and the reducer.

Figures: FarisRedza/polarisation_compensation, commit 87320b67 (GitHub), tests/polarisation/data and tests/hogs/data; recomputed
independently with numpy and pandas for this project. The files are not part of it.
"""

from datetime import UTC, datetime

import numpy as np
import pytest

from analysis.judge.fold import episodes_of, fold, start_state
from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import plain_samples_of
from analysis.quantities import angle_between_rad
from analysis.record.calibrations import new_version
from analysis.record.reduce_span import reduced_samples
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import Reason, Trust
from ingest.models import SetAside, Tap, TapKind, Touch, Unit
from tests.factories import make_tap
from tests.realdata.sets import all_readings, imported, table

pytestmark = [pytest.mark.realdata, pytest.mark.django_db]

ROWS = {"a": 1005, "b": 5730, "c": 5959, "d": 2745}
DOP_ABOVE_ONE = {"a": 4, "b": 119, "c": 67, "d": 14}         # from S; 121 in run b's rounded column
START = {"a": "2025-02-28T14:41:28", "b": "2025-02-28T14:44:11", "c": "2025-02-28T14:48:05", "d": "2025-04-14T14:12:46"}


@pytest.fixture
def tap() -> Tap:
    tap = make_tap(kind=TapKind.STOKES, unit=Unit.MILLIWATT, interval_s=None)
    new_version(tap, datetime(2020, 1, 1, tzinfo=UTC), {"wanted_state": [1.0, 0.0, 0.0]})
    return tap


def run(tap: Tap, name: str) -> dict[str, int]:
    return imported(tap, f"fibre_sop_runs/run_{name}.csv.gz", f"fibre_run_{name}.toml")


def reduced_run(tap: Tap, name: str) -> Reduced:
    assert run(tap, name)["stored"] == ROWS[name]
    return reduced_samples(tap, 0, 2**62)


def t_s(reduced: Reduced, name: str) -> np.ndarray:
    """The run's own seconds, back from the stored times."""
    return (reduced.at_us - zero_us(name)) / 1e6


def zero_us(name: str) -> int:
    """Where the mapping puts the run's second 0."""
    return int(datetime.fromisoformat(START[name] + "+00:00").timestamp()) * 1_000_000


@pytest.mark.parametrize("name", ROWS)
def test_every_row_is_stored_once_and_to_the_last_bit(tap, name):
    assert run(tap, name) == {"rows": ROWS[name], "stored": ROWS[name], "known": 0, "set_aside": 0, "lines_left_out": 1}
    readings, rows = all_readings(tap), table(f"fibre_sop_runs/run_{name}.csv.gz")
    for ours, theirs in (("s0", "S0_mw"), ("s1", "S1_mw"), ("s2", "S2_mw"), ("s3", "S3_mw")):
        np.testing.assert_array_equal(readings.column(ours), rows[theirs])


@pytest.mark.parametrize("name", ROWS)
def test_twice_changes_nothing(tap, name):
    run(tap, name)
    before, touched = all_readings(tap), Touch.objects.count()
    assert run(tap, name) == {"rows": ROWS[name], "stored": 0, "known": ROWS[name], "set_aside": 0, "lines_left_out": 1}
    after = all_readings(tap)
    for one, other in ((before.at_us, after.at_us), (before.sequence, after.sequence), (before.arrival_us, after.arrival_us),
                       *((before.columns[column], after.columns[column]) for column in ("s0", "s1", "s2", "s3"))):
        np.testing.assert_array_equal(one, other)
    assert Touch.objects.count() == touched and not SetAside.objects.exists()


@pytest.mark.parametrize("name", ROWS)
def test_stored_stokes_agree_with_the_instruments_own_columns(tap, name):
    """Worst differences over a run are the instrument's rounding: DOP 0.081 %, azimuth 0.0116°, ellipticity 0.0112°."""
    reduced, rows = reduced_run(tap, name), table(f"fibre_sop_runs/run_{name}.csv.gz")
    assert np.abs(100 * reduced.dop - rows["dop_pct"]).max() <= 0.0815
    azimuth_off_deg = (np.degrees(reduced.azimuth_rad) - rows["azimuth_deg"] + 90.0) % 180.0 - 90.0
    assert np.abs(azimuth_off_deg).max() <= 0.01165
    assert np.abs(np.degrees(reduced.ellipticity_rad) - rows["ellipticity_deg"]).max() <= 0.01125


@pytest.mark.parametrize("name", ROWS)
def test_dop_above_one_is_flagged_never_refused(tap, name):
    reduced = reduced_run(tap, name)
    assert int((reduced.dop > 1.0).sum()) == DOP_ABOVE_ONE[name]
    is_flagged = (reduced.reasons[Quantity.DOP] & int(Reason.DOP_ABOVE_ONE)) != 0
    assert not (is_flagged & (reduced.dop <= 1.0)).any()
    assert (reduced.trust[Quantity.DOP][is_flagged] == Trust.DOUBTFUL).all()
    if name == "b":
        assert int((table("fibre_sop_runs/run_b.csv.gz")["dop_pct"] > 100).sum()) == 121


def test_run_a_begins_with_an_artefact_that_is_kept(tap):
    reduced = reduced_run(tap, "a")
    assert reduced.dop[0] == pytest.approx(1.234, abs=5e-4)
    assert np.degrees(angle_between_rad(reduced.sop[0], reduced.sop[1])) == pytest.approx(122.63, abs=0.01)


def test_run_c_extinction_ratio(tap):
    er_db = reduced_run(tap, "c").er_db
    assert [np.median(er_db), er_db.min(), er_db.max()] == pytest.approx([3.337, -3.359, 13.720], abs=1e-3)


def test_run_c_time_below_3_db(tap):
    """79.98 s below 3 dB in 37 plain episodes, each sample holding until the next."""
    reduced = reduced_run(tap, "c")
    is_below = reduced.er_db < 3.0
    assert np.diff(reduced.at_us)[is_below[:-1]].sum() / 1e6 == pytest.approx(79.98, abs=0.01)
    assert int((np.diff(is_below.astype(int), prepend=0) == 1).sum()) == 37


def test_run_c_is_one_episode_with_delays(tap):
    """On-delay 1 s, clear at +1 dB for 1 s: one episode, 41.107 to 157.628 s."""
    reduced = reduced_run(tap, "c")
    rule = LimitRule(quantity=Quantity.ER_DB, alarm=3.0, on_delay_s=1.0, off_delay_s=1.0, deadband=1.0)
    interval_s = float(np.median(np.diff(reduced.at_us))) / 1e6
    _, events = fold(rule, start_state(), plain_samples_of(reduced, Quantity.ER_DB), interval_s)
    [episode] = episodes_of(events)
    bounds_us = np.array([episode.raised_us, episode.returned_us])
    np.testing.assert_allclose((bounds_us - zero_us("c")) / 1e6, [41.107, 157.628], rtol=0, atol=5e-4)


def test_run_c_motion_of_1_s_means(tap):
    """Angle between the mean states of neighbouring seconds: rms 8.1490°, max 30.877°, sum 704.366°."""
    reduced = reduced_run(tap, "c")
    readings = all_readings(tap)
    second = np.floor(t_s(reduced, "c")).astype(int)
    sums = np.stack([np.bincount(second, readings.column(name)) for name in ("s1", "s2", "s3")], axis=-1)
    angle_deg = np.degrees(angle_between_rad(sums[:-1], sums[1:]))
    rms_deg = np.sqrt(np.mean(angle_deg**2))
    assert [rms_deg, angle_deg.max(), angle_deg.sum()] == pytest.approx([8.1490, 30.877, 704.366], abs=1e-3)


def test_run_d_has_undefined_er_and_two_kinds_of_it(tap):
    """2 rows with a cross port <= 0; port ER median 3.1, max 12.8 dB; of the polarized part 5.5 and 42.2 dB."""
    reduced = reduced_run(tap, "d")
    rows = table("fibre_sop_runs/run_d.csv.gz")
    is_negative = (rows["S0_mw"] - rows["S1_mw"]).to_numpy() <= 0
    assert is_negative.sum() == 2 and np.isnan(reduced.er_db[is_negative]).all()
    good = reduced.er_db[np.isfinite(reduced.er_db)]
    assert [np.median(good), good.max()] == pytest.approx([3.1, 12.8], abs=0.05)
    polarized = reduced.polarized_er_db[np.isfinite(reduced.polarized_er_db)]
    assert [np.median(polarized), polarized.max()] == pytest.approx([5.5, 42.2], abs=0.05)
    dop_pct = 100 * reduced.dop
    assert [dop_pct.min(), np.median(dop_pct), dop_pct.max()] == pytest.approx([26, 59, 113], abs=0.6)


@pytest.mark.parametrize("name", ROWS)
def test_the_ellipse_columns_give_the_same_states(tap, name):
    """Read in by wall time and azimuth, ellipticity, DOP, power: the states differ by the columns' rounding only."""
    rows = table(f"fibre_sop_runs/run_{name}.csv.gz")
    by_stokes = reduced_run(tap, name)
    other = make_tap(kind=TapKind.STOKES, unit=Unit.MILLIWATT)
    counts = imported(other, f"fibre_sop_runs/run_{name}.csv.gz", "fibre_angles.toml")
    assert counts["stored"] == ROWS[name]
    by_angles = reduced_samples(other, 0, 2**62)
    np.testing.assert_array_equal(by_angles.at_us, rows["wall_time"].astype("datetime64[us]").astype("int64"))
    off_deg = np.degrees(angle_between_rad(by_stokes.sop, by_angles.sop))
    assert off_deg.max() < 0.035                       # on the sphere: twice the rounding of azimuth and ellipticity
    np.testing.assert_allclose(by_angles.dop, rows["dop_pct"] / 100, rtol=1e-14)
