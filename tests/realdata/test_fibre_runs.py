"""Full Stokes records at a fibre's end, compared with the instrument's own columns.

Source: F. Redza, polarisation_compensation (public repository), commit 87320b6, test data; no licence stated, so the files
are read where they lie. Figures: recomputed independently with numpy and pandas from those files.
"""

from functools import cache

import numpy as np
import pytest

from analysis.drift.bins import bin_means
from analysis.judge.fold import episodes_of, fold, start_state
from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import plain_samples_of, seconds_of
from analysis.quantities import angle_between_rad
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from analysis.reduce.trust import Trust
from analysis.rollup.cells import cells_of, holds_us
from tests.realdata.sets import table
from tests.reference.aligned import aligned

pytestmark = pytest.mark.realdata
RUNS = "abcd"
ROWS = {"a": 1005, "b": 5730, "c": 5959, "d": 2745}


@cache
def run(name):
    """The file's table and its reduction, with horizontal light wanted."""
    rows = table(f"fibre_sop_runs/run_{name}.csv.gz")
    at_us = np.round(rows["t_s"].to_numpy() * 1e6).astype(np.int64)
    columns = {f"s{k}": rows[f"S{k}_mw"].to_numpy() for k in range(4)}
    return rows, reduce_tap("stokes", "mW", at_us, columns, TapCalibration(wanted_state=[1.0, 0.0, 0.0]))


@pytest.mark.parametrize("name", RUNS)
def test_every_row_is_there(name):
    rows, reduced = run(name)
    assert len(rows) == len(reduced) == ROWS[name]


def worst(difference):
    return float(np.max(np.abs(difference)))


ROUNDING = {
    "dop_pct": 0.081,
    "azimuth_deg": 0.0116,
    "ellipticity_deg": 0.0112,
    "docp_pct": 0.0735,
    "dolp_pct": 0.079,
    "phase_deg": 0.018,
}


@pytest.mark.parametrize(("quantity", "expected"), ROUNDING.items())
def test_largest_difference_from_the_instrument_is_its_own_rounding(quantity, expected):
    """Over all four runs; azimuth has period 180 deg, the phase arg(s2 + i s3) 360 deg."""
    worst_of_all = 0.0
    for name in RUNS:
        rows, reduced = run(name)
        sop = reduced.sop
        mine = {
            "dop_pct": 100 * reduced.dop,
            "azimuth_deg": np.degrees(reduced.azimuth_rad),
            "ellipticity_deg": np.degrees(reduced.ellipticity_rad),
            "docp_pct": 100 * reduced.dop * np.abs(sop[:, 2]),
            "dolp_pct": 100 * reduced.dop * np.hypot(sop[:, 0], sop[:, 1]),
            "phase_deg": np.degrees(np.arctan2(sop[:, 2], sop[:, 1])),
        }[quantity]
        difference = mine - rows[quantity].to_numpy()
        period = {"azimuth_deg": 180.0, "phase_deg": 360.0}.get(quantity)
        if period:
            difference = (difference + period / 2) % period - period / 2
        worst_of_all = max(worst_of_all, worst(difference))
    assert worst_of_all == pytest.approx(expected, rel=0.05)


def test_ellipticity_from_s0_would_err_by_over_31_degrees_in_run_d():
    """The contrast that shows S3/|S| is meant: S3/S0 is wrong for DOP below 1."""
    rows, reduced = run("d")
    wrong_deg = np.degrees(0.5 * np.arcsin(np.clip(rows["S3_mw"] / rows["S0_mw"], -1, 1)))
    assert worst(wrong_deg - np.degrees(reduced.ellipticity_rad)) == pytest.approx(31.5, abs=0.1)


@pytest.mark.parametrize(("name", "rounded", "from_s"), [("a", 4, 4), ("b", 121, 119), ("c", 67, 67), ("d", 14, 14)])
def test_dop_above_one_is_kept_and_doubtful(name, rounded, from_s):
    rows, reduced = run(name)
    assert (rows["dop_pct"] > 100).sum() == rounded
    assert (reduced.dop > 1).sum() == from_s
    assert (reduced.trust[Quantity.DOP] == Trust.DOUBTFUL).sum() == from_s
    assert np.isfinite(reduced.dop).all()


def test_first_row_of_run_a_is_a_start_up_artefact():
    _, reduced = run("a")
    assert 100 * reduced.dop[0] == pytest.approx(123.4, abs=0.05)
    assert np.degrees(angle_between_rad(reduced.sop[0], reduced.sop[1])) == pytest.approx(122.63, abs=0.01)


def test_run_d_is_weakly_polarized_and_has_two_negative_cross_ports():
    _, reduced = run("d")
    assert [round(100 * x) for x in (reduced.dop.min(), np.median(reduced.dop), reduced.dop.max())] == [26, 59, 113]
    assert np.isnan(reduced.er_db).sum() == 2
    assert (reduced.trust[Quantity.ER_DB] == Trust.UNTRUSTED).sum() == 2
    assert np.nanmedian(reduced.er_db) == pytest.approx(3.1, abs=0.05) and np.nanmax(reduced.er_db) == pytest.approx(
        12.8, abs=0.05
    )
    assert np.nanmedian(reduced.polarized_er_db) == pytest.approx(5.5, abs=0.05)
    assert np.nanmax(reduced.polarized_er_db) == pytest.approx(42.2, abs=0.05)


def test_er_of_run_c():
    _, reduced = run("c")
    found = [np.median(reduced.er_db), reduced.er_db.min(), reduced.er_db.max()]
    np.testing.assert_allclose(found, [3.337, -3.359, 13.720], atol=1e-3)


def test_time_of_run_c_below_3_db():
    """Each sample holds until the next: 79.98 s."""
    _, reduced = run("c")
    hold_s = np.diff(reduced.at_us, append=reduced.at_us[-1]) / 1e6
    assert hold_s[reduced.er_db < 3.0].sum() == pytest.approx(79.98, abs=0.01)
    spacing_s = float(np.median(np.diff(reduced.at_us))) / 1e6
    held_s = holds_us(reduced.at_us, spacing_s, next_us=int(reduced.at_us[-1]) + 1) / 1e6
    assert held_s[reduced.er_db < 3.0].sum() == pytest.approx(79.98, abs=0.02)  # few spacings pass three intervals


def test_run_c_has_37_plain_episodes_and_one_with_delays():
    """Limit 3 dB; with 1 s on-delay and clear at +1 dB for 1 s exactly one episode, 41.107 to 157.628 s."""
    _, reduced = run("c")
    samples = plain_samples_of(reduced, Quantity.ER_DB)
    interval_s = float(np.median(np.diff(reduced.at_us))) / 1e6
    plain = LimitRule(quantity=Quantity.ER_DB, alarm=3.0, on_delay_s=0.0, off_delay_s=0.0, deadband=0.0)
    assert len(episodes_of(fold(plain, start_state(), samples, interval_s)[1])) == 37
    delayed = LimitRule(quantity=Quantity.ER_DB, alarm=3.0, on_delay_s=1.0, off_delay_s=1.0, deadband=1.0)
    (episode,) = episodes_of(fold(delayed, start_state(), samples, interval_s)[1])
    assert (episode.raised_us, episode.returned_us) == (41_107_000, 157_628_000)
    (by_seconds,) = episodes_of(fold(delayed, start_state(), seconds_of(reduced, Quantity.ER_DB), interval_s)[1])
    assert abs(by_seconds.raised_us - episode.raised_us) < 2_000_000  # the worst of each second is judged, at its first sample
    assert abs(by_seconds.returned_us - episode.returned_us) < 2_000_000


def test_motion_of_run_c_between_mean_states_of_a_second():
    """Mean of S over each second, normalised: rms 8.1490, largest 30.877, sum 704.366 deg."""
    rows, reduced = run("c")
    number, mean = bin_means(reduced.at_us, rows[["S1_mw", "S2_mw", "S3_mw"]].to_numpy(), 1_000_000)
    step_deg = np.degrees(angle_between_rad(mean[:-1], mean[1:]))[np.diff(number) == 1]
    np.testing.assert_allclose(
        [np.sqrt(np.mean(step_deg**2)), step_deg.max(), step_deg.sum()], [8.1490, 30.877, 704.366], rtol=0, atol=1e-3
    )


def test_allan_deviation_of_run_c():
    """Of the 1 s means of ellipticity between 2 s and 32 s, at 1 s: 0.228493 deg."""
    _, reduced = run("c")
    chosen = (reduced.at_us >= 2_000_000) & (reduced.at_us < 32_000_000)
    found = aligned(reduced.at_us[chosen], np.degrees(reduced.ellipticity_rad[chosen]), 1.0)
    assert found == (pytest.approx(0.228493, abs=1e-6), 29)


def test_rollups_of_run_c_keep_its_ends_and_its_er_of_sums():
    rows, reduced = run("c")
    cells = cells_of(reduced, 86400, np.full(len(reduced), 31_000))
    values = cells.values[0]
    np.testing.assert_allclose([values["er_db_min"], values["er_db_max"]], [-3.359, 13.720], atol=1e-3)
    total, first = rows["S0_mw"].sum(), rows["S1_mw"].sum()
    np.testing.assert_allclose(values["wanted_sum"] / values["other_sum"], (total + first) / (total - first), rtol=1e-9)
    np.testing.assert_allclose(values["stokes_sum"], rows[["S1_mw", "S2_mw", "S3_mw"]].sum() * 1e-3, rtol=1e-9)
