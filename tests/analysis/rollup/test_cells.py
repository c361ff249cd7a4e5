"""Rollup cells: merging must equal computing from all samples at once."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.rule import Quantity
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.sample import concatenate as join_samples
from analysis.reduce.tap import reduce_tap
from analysis.reduce.trust import QUANTITIES, Trust
from analysis.rollup.cells import CELL, LEVELS_S, cells_of, concatenate, empty_cells, holds_us, merge
from tests.reference.values import reference, references
from tests.strategies import times_us, two_port_samples, unit_sops

S = 1_000_000


def power_samples(values, at_us=None):
    """Two-port samples whose power takes given values (all light in port 1)."""
    values = np.asarray(values, float)
    at_us = np.arange(len(values), dtype=np.int64) if at_us is None else at_us
    return reduce_tap("two-port", "W", at_us, {"port1": values, "port2": np.zeros(len(values))}, TapCalibration())


def cells(reduced, level_s=10, tap=None):
    return cells_of(reduced, level_s, np.full(len(reduced), S), tap)


def assert_same(one, other, rtol=1e-9):
    np.testing.assert_array_equal(one.tap, other.tap)
    np.testing.assert_array_equal(one.bucket_us, other.bucket_us)
    for name in CELL.names:
        if name.endswith("_m2"):
            mean = np.abs(other.values[name[:-3] + "_mean"])
            np.testing.assert_allclose(
                one.values[name], other.values[name], rtol=rtol, atol=float(np.max(mean**2, initial=0)) * 1e-12
            )
        else:
            np.testing.assert_allclose(one.values[name], other.values[name], rtol=rtol, atol=1e-15, equal_nan=True, err_msg=name)
    for name in ("cell", "bin", "count"):
        np.testing.assert_array_equal(getattr(one.er_histogram, name), getattr(other.er_histogram, name))


@given(two_port_samples(max_size=80), st.data())
def test_merged_parts_are_the_whole(reduced, data):
    """Any division of the samples, in any order of the parts, at the same level."""
    owner = np.array(data.draw(st.lists(st.integers(0, 3), min_size=len(reduced), max_size=len(reduced))))
    parts = [cells(reduced.take(owner == k)) for k in data.draw(st.permutations([0, 1, 2, 3])) if (owner == k).any()]
    assert_same(concatenate(parts), cells(reduced))


@given(two_port_samples(max_size=80))
def test_coarser_cells_come_from_finer_ones(reduced):
    step = cells(reduced, LEVELS_S[0])
    for level_s in LEVELS_S[1:]:
        step = merge(step, level_s)
        assert_same(step, cells(reduced, level_s))
    assert_same(merge(cells(reduced, 10), 86400), step)


@given(two_port_samples(max_size=30), two_port_samples(max_size=30), two_port_samples(max_size=30))
def test_merging_is_associative_and_commutative(a, b, c):
    one, two, three = cells(a, 3600), cells(b, 3600), cells(c, 3600)
    assert_same(concatenate([concatenate([one, two]), three]), concatenate([one, concatenate([three, two])]))


@given(two_port_samples(max_size=40), two_port_samples(max_size=40))
def test_many_taps_in_one_call_equal_one_call_each(a, b):
    tap = np.repeat([0, 1], [len(a), len(b)])
    together = cells(join_samples([a, b]), tap=tap)
    assert_same(together.take(together.tap == 0), cells(a))
    alone = cells(b, tap=np.ones(len(b), np.int64))
    assert_same(together.take(together.tap == 1), alone)


@given(two_port_samples(max_size=60))
def test_merging_nothing_changes_nothing(reduced):
    """T11-empty: an empty summary is neutral, and two empty ones stay empty."""
    whole = cells(reduced)
    assert_same(concatenate([empty_cells(10), whole, empty_cells(10)]), whole)
    assert len(concatenate([empty_cells(10), empty_cells(10)])) == 0


def test_merge_of_two_summaries():
    """Chan, Golub, LeVeque, Am. Stat. 37, 242 (1983), by T11-merge-01: n, mean, M2."""
    row = reference("T11-merge-01")
    parts = []
    for part in (row["inputs"]["A"], row["inputs"]["B"]):
        one = cells(power_samples([float(part["mean"])]))
        one.values["power_w_count"], one.values["power_w_m2"] = part["n"], part["M2"]
        parts.append(one)
    found = concatenate(parts).values[0]
    assert found["power_w_count"] == row["expected"]["n"]
    np.testing.assert_allclose(
        [found["power_w_mean"], found["power_w_m2"]], [row["expected"]["mean"], row["expected"]["M2"]], rtol=1e-13
    )


@pytest.mark.parametrize("row", references("T11-strd"), ids=lambda row: row["id"])
def test_certified_mean_and_spread(row):
    """NIST Statistical Reference Datasets, certified values; in one piece, and merged from pieces of 17."""
    x = row["inputs"]
    data = x.get("data")
    if data is None:
        base, pair = {"T11-strd-NumAcc2": (1.2, (1.1, 1.3)), "T11-strd-NumAcc3": (1000000.2, (1000000.1, 1000000.3))}[row["id"]]
        data = [base, *(pair * 500)]
    assert len(data) == x["n"]
    pieces = [cells(power_samples(data[k : k + 17])) for k in range(0, len(data), 17)]
    for found in (cells(power_samples(data)).values[0], concatenate(pieces).values[0]):
        np.testing.assert_allclose(found["power_w_mean"], row["expected"]["mean"], rtol=1e-12)
        spread = np.sqrt(found["power_w_m2"] / (found["power_w_count"] - 1))
        np.testing.assert_allclose(spread, row["expected"]["sd"], rtol=max(row["tolerance"]["value"], 1e-10))


def test_a_large_offset_does_not_drown_a_small_spread():
    """T11-shift: a sum of squares in double precision gives -170.7 here; and 1e-3 +- 1e-12 gave 0 (rounding trap)."""
    row = reference("T11-shift")
    found = cells(power_samples(row["inputs"]["x"])).values[0]
    np.testing.assert_allclose(found["power_w_m2"] / 3, row["expected"], rtol=1e-9)
    tiny = 1e-3 + np.array([-1e-12, 1e-12] * 500)
    exact = [Fraction(float(value)) for value in tiny]
    mean = sum(exact) / len(exact)
    m2 = float(sum((value - mean) ** 2 for value in exact))
    pieces = concatenate([cells(power_samples(part)) for part in np.split(tiny, 20)]).values[0]
    np.testing.assert_allclose(pieces["power_w_m2"], m2, rtol=1e-6)


def test_directions_merge_as_sum_vectors():
    """T11-resultant: sums of unit vectors are additive, mean angles are not."""
    row = reference("T11-resultant")
    psi, chi = np.array(row["inputs"]["psi_chi_deg"]).T
    columns = {"azimuth_deg": psi, "ellipticity_deg": chi, "dop": np.ones(5)}
    at_us = np.arange(5, dtype=np.int64)
    light = reduce_tap("stokes", "mW", at_us, columns, TapCalibration())
    found = concatenate([cells(light.take(slice(0, 2))), cells(light.take(slice(2, 5)))]).values[0]
    np.testing.assert_allclose(np.linalg.norm(found["sop_sum"]), row["expected"]["R"], rtol=1e-12)
    mean_deg = np.degrees(0.5 * np.arctan2(found["sop_sum"][1], found["sop_sum"][0]))
    np.testing.assert_allclose(mean_deg, row["expected"]["psi_mean_deg"], rtol=1e-12)
    assert found["sop_count"] == 5


@given(st.lists(unit_sops(), min_size=1, max_size=20))
def test_stokes_sum_is_the_sum_of_the_readings(sops):
    sops = np.array(sops)
    columns = {"s0": np.full(len(sops), 2.0)} | {f"s{k + 1}": 1.5 * sops[:, k] for k in range(3)}
    found = cells(reduce_tap("stokes", "mW", np.arange(len(sops), dtype=np.int64), columns, TapCalibration())).values[0]
    np.testing.assert_allclose(found["stokes_sum"], 1.5e-3 * sops.sum(axis=0), atol=1e-12)
    np.testing.assert_allclose(found["sop_sum"], sops.sum(axis=0), atol=1e-12)


def test_port_sums_are_signed_and_unclipped():
    """A floor sample below zero counts as read, so that noise averages out instead of adding up."""
    columns = {"port1": np.full(4, 1e-3), "port2": np.array([1e-9, -1e-9, 0.5e-9, -0.4e-9])}
    reduced = reduce_tap("two-port", "W", np.arange(4, dtype=np.int64), columns, TapCalibration(floor2=1e-9))
    found = cells(reduced).values[0]
    np.testing.assert_allclose(found["other_sum"], 0.1e-9, rtol=1e-9)
    assert found["lower_bounds"] == found["er_count"] == 4


@given(two_port_samples(max_size=60))
def test_counts_and_ends_are_those_of_the_samples(reduced):
    whole = merge(cells(reduced, 86400 * 100))
    found = {name: whole.values[name] for name in CELL.names}
    assert found["count"].sum() == len(reduced)
    for k, quantity in enumerate(QUANTITIES):
        value, trust = reduced.values(quantity), reduced.trust[quantity]
        usable = np.isfinite(value) & (trust >= Trust.DOUBTFUL)
        assert found["trusted"][:, k].sum() == np.sum(usable & (trust == Trust.TRUSTED))
        assert found["doubtful"][:, k].sum() == np.sum(usable & (trust == Trust.DOUBTFUL))
        assert found["untrusted"][:, k].sum() == np.sum((trust != Trust.NONE) & ~usable)
        name = quantity.value
        lowest, highest = found[f"{name}_min"], found[f"{name}_max"]
        if usable.any():
            assert np.nanmin(lowest) == value[usable].min() and np.nanmax(highest) == value[usable].max()
        else:
            assert np.isnan(lowest).all() and np.isnan(highest).all()
    usable = np.isfinite(reduced.er_db) & (reduced.trust[Quantity.ER_DB] >= Trust.DOUBTFUL)
    np.testing.assert_allclose(found["wanted_sum"].sum(), reduced.wanted_power[usable].sum(), rtol=1e-12)


def test_trusted_time_is_how_long_trusted_samples_hold():
    at_us = np.array([0, 1, 2, 9, 10, 11]) * S
    columns = {"port1": np.array([1e-3, 1e-3, 2e-2, 1e-3, 1e-3, 1e-3]), "port2": np.full(6, 1e-6)}
    reduced = reduce_tap("two-port", "W", at_us, columns, TapCalibration(saturation1=1e-2))
    hold = holds_us(at_us, 1.0, next_us=12 * S)
    assert (hold // S).tolist() == [1, 1, 3, 1, 1, 1]  # at most three intervals, then it is a gap
    found = cells_of(reduced, 10, hold)
    assert (found.values["trusted_us"][:, 0] // S).tolist() == [3, 2] and (found.values["covered_us"] // S).tolist() == [6, 2]


@given(st.data())
def test_holds_never_overlap(data):
    at_us = data.draw(times_us(20))
    hold = holds_us(at_us, 1.0)
    assert (hold > 0).all() and (hold <= 3 * S).all() and (at_us[:-1] + hold[:-1] <= at_us[1:]).all()


def test_buckets_start_at_whole_multiples_of_their_length():
    found = cells(power_samples([1.0, 1.0], np.array([1_700_000_009_999_999, 1_700_000_010_000_000])))
    assert found.bucket_us.tolist() == [1_700_000_000 * S, 1_700_000_010 * S]


def test_a_level_that_would_cut_buckets_is_refused():
    with pytest.raises(ValueError, match="level_s=15 is not a multiple of 10"):
        merge(cells(power_samples([1.0])), 15)
    with pytest.raises(ValueError, match="takes one level"):
        concatenate([empty_cells(10), empty_cells(60)])
