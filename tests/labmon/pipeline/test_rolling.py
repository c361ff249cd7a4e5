"""Rollups made bit by bit, late or twice are those made at once; histories are read from any level."""

import numpy as np
import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from analysis.models import RollupDue, RollupPage, RollupRow
from analysis.record.rollup_rows import open_cells
from analysis.record.rollups import history, level_for
from analysis.rollup.cells import LEVELS_S
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.process import process_touched
from labmon.pipeline.rolling import compact_closed_days, roll_up_coarse_due, roll_up_due
from tests.factories import NOON_US, make_tap, store_readings
from tests.labmon.pipeline.lab import S, ports_of

pytestmark = pytest.mark.django_db
DAY_US = 86_400 * S
MIDNIGHT_US = NOON_US - DAY_US // 2


def readings(count, seed=1):
    generator = np.random.default_rng(seed)
    return ports_of(generator.uniform(15, 35, count)) | {"temperature_c": 20 + generator.standard_normal(count)}


def send(tap, index, columns):
    store_readings(tap, NOON_US + index * S, **{name: values[index] for name, values in columns.items()})


def all_rows(tap):
    return {level_s: open_cells([tap.pk], level_s, NOON_US - DAY_US, NOON_US + DAY_US) for level_s in LEVELS_S}


def assert_alike(one, other):
    for level_s in LEVELS_S:
        np.testing.assert_array_equal(one[level_s].bucket_us, other[level_s].bucket_us)
        for name in one[level_s].values.dtype.names:
            np.testing.assert_allclose(
                one[level_s].values[name], other[level_s].values[name], rtol=1e-9, atol=1e-18, err_msg=f"{level_s} {name}"
            )


@pytest.mark.parametrize("seed", range(3))
def test_bit_by_bit_late_and_twice_is_as_at_once(seed):
    columns, index = readings(400), np.arange(400)
    whole = make_tap()
    send(whole, index, columns)
    catch_up(now_us=NOON_US + 500 * S)
    generator = np.random.default_rng(seed)
    pieces = np.split(index, np.sort(generator.choice(index[1:], 12, replace=False)))
    generator.shuffle(pieces)
    bits = make_tap()
    for piece in pieces:
        send(bits, piece, columns)
        process_touched(now_us=NOON_US + 450 * S)
        if generator.random() < 0.6:
            roll_up_due(NOON_US + 450 * S)
            roll_up_coarse_due()
    catch_up(now_us=NOON_US + 500 * S)
    RollupDue.objects.create(tap=bits, first_at_us=NOON_US + 50 * S, last_at_us=NOON_US + 60 * S)
    catch_up(now_us=NOON_US + 500 * S)
    assert_alike(all_rows(bits), all_rows(whole))
    assert not RollupDue.objects.exists()


def test_mean_of_twenty_and_forty_db_is_the_er_of_the_sums():
    """JOB 7a: minutes of 20 and 40 dB average to 22.97 dB: -10 log10((10^-2 + 10^-4) / 2)."""
    tap = make_tap()
    store_readings(tap, NOON_US + np.arange(120) * S, **ports_of(np.repeat([20.0, 40.0], 60)))
    catch_up(now_us=NOON_US + 200 * S)
    cells = open_cells([tap.pk], 3600, NOON_US, NOON_US + 1)
    assert -10 * np.log10(cells.values["other_sum"][0] / cells.values["wanted_sum"][0]) == pytest.approx(22.967, abs=1e-3)


@pytest.mark.parametrize("quantity", ["er_db", "angle_deg", "power_w", "temperature_c"])
def test_history_is_the_same_from_raw_and_from_every_level(quantity):
    tap = make_tap()
    store_readings(tap, NOON_US + np.arange(7200) * S, **readings(7200))
    catch_up(now_us=NOON_US + 8000 * S)
    raw = history(tap.pk, quantity, NOON_US, NOON_US + 3600 * S, 6)
    fine = history(tap.pk, quantity, NOON_US, NOON_US + 7200 * S, 12)
    assert (raw.bucket_s, fine.bucket_s) == (600.0, 600.0)
    for name in ("at_us", "min", "mean", "max"):
        np.testing.assert_allclose(getattr(fine, name)[:6], getattr(raw, name)[:6], rtol=1e-9)
    np.testing.assert_allclose(fine.trusted_share[:12], 1.0, atol=0.01)


def test_gap_is_a_gap():
    tap = make_tap()
    for start in (0, 5000):
        store_readings(tap, NOON_US + (start + np.arange(100)) * S, **readings(100))
    catch_up(now_us=NOON_US + 6000 * S)
    shown = history(tap.pk, "er_db", NOON_US, NOON_US + 6000 * S, 100)
    assert len(shown.at_us) == 100 and shown.bucket_s == 60.0
    known = np.isfinite(shown.mean)
    assert np.flatnonzero(known).tolist() == [0, 1, 83, 84] and (shown.trusted_share[2:83] == 0).all()


def test_closed_days_are_one_buffer_and_read_the_same():
    tap = make_tap()
    at_us = MIDNIGHT_US - DAY_US + np.arange(3000) * 60 * S
    store_readings(tap, at_us, **readings(3000))
    process_touched(now_us=int(at_us[-1]))
    roll_up_due(now_us=MIDNIGHT_US - 2 * DAY_US)  # every day still open: rows
    roll_up_coarse_due()
    assert not RollupPage.objects.exists()
    before = [history(tap.pk, "er_db", int(at_us[0]), int(at_us[-1]), points) for points in (50, 400, 2000)]
    while compact_closed_days(now_us=MIDNIGHT_US + 30 * DAY_US):
        pass
    assert not RollupRow.objects.exists() and RollupPage.objects.filter(level_s=10).count() == 3
    for points, one in zip((50, 400, 2000), before, strict=True):
        other = history(tap.pk, "er_db", int(at_us[0]), int(at_us[-1]), points)
        np.testing.assert_allclose(other.mean, one.mean)
        np.testing.assert_allclose(other.max, one.max)


def test_late_readings_of_a_closed_day_are_merged_into_its_buffer():
    columns, index = readings(2000), np.arange(2000)
    at_us = MIDNIGHT_US + index * 30 * S
    whole, late = make_tap(interval_s=30.0), make_tap(interval_s=30.0)
    closed_us = MIDNIGHT_US + 5 * DAY_US
    for tap, pieces in ((whole, [index]), (late, [index[:700], index[900:], index[700:900]])):
        for piece in pieces:
            store_readings(tap, at_us[piece], **{name: values[piece] for name, values in columns.items()})
            catch_up(now_us=closed_us)
    assert not RollupRow.objects.exists()
    for quantity in ("er_db", "temperature_c"):
        one, other = (history(tap.pk, quantity, MIDNIGHT_US, MIDNIGHT_US + DAY_US, 300) for tap in (whole, late))
        np.testing.assert_allclose(other.mean, one.mean)
        np.testing.assert_allclose(other.trusted_share, one.trusted_share)


def test_days_of_one_page_do_not_disturb_each_other():
    """Twenty days of a reading each half hour: days late and out of order give the histories of all at once."""
    columns, index = readings(960), np.arange(960)
    at_us = MIDNIGHT_US + index * 1800 * S
    late, closed_us = np.arange(400, 448), MIDNIGHT_US + 40 * DAY_US
    whole, bits = make_tap(interval_s=1800.0), make_tap(interval_s=1800.0)
    for tap, pieces in ((whole, [index]), (bits, [np.setdiff1d(index, late), late])):
        for piece in pieces:
            store_readings(tap, at_us[piece], **{name: values[piece] for name, values in columns.items()})
            catch_up(now_us=closed_us)
    for level_s in LEVELS_S:
        pages = RollupPage.objects.filter(level_s=level_s).order_by("page_us")
        one, other = (list(pages.filter(tap=tap).values_list("page_us", "count")) for tap in (whole, bits))
        assert one == other
    assert RollupPage.objects.filter(tap=bits, level_s=3600).count() <= 4
    for points in (20, 400, 2000):
        one, other = (history(tap.pk, "er_db", MIDNIGHT_US, MIDNIGHT_US + 20 * DAY_US, points) for tap in (whole, bits))
        np.testing.assert_allclose(other.mean, one.mean)
        np.testing.assert_allclose(other.min, one.min)


@pytest.mark.parametrize(
    ("span_s", "points", "level_s"),
    [
        (600, 2000, None),
        (3600, 2000, None),
        (7200, 2000, 10),
        (86_400, 2000, 60),
        (30 * 86_400, 2000, 600),
        (365 * 86_400, 2000, 3600),
        (10 * 365 * 86_400, 2000, 86_400),
        (86_400, 100, 600),
        (86_400, 40, 3600),
    ],
)
def test_level_fits_the_picture_not_the_span(span_s, points, level_s):
    assert level_for(span_s, points) == level_s


@pytest.mark.parametrize(
    ("quantity", "until_us", "points"), [("hue", NOON_US + S, 5), ("er_db", NOON_US, 5), ("er_db", NOON_US + S, 0)]
)
def test_history_that_cannot_be_meant_is_refused(quantity, until_us, points):
    with pytest.raises(ValueError):
        history(make_tap().pk, quantity, NOON_US, until_us, points)


def test_history_of_nothing_is_all_gap():
    shown = history(make_tap().pk, "er_db", NOON_US, NOON_US + 600 * S, 10)
    assert len(shown.at_us) == 10 and np.isnan(shown.mean).all()


def test_queries_do_not_grow_with_taps():
    counts = []
    for taps in (2, 12):
        for _ in range(taps):
            store_readings(make_tap(), NOON_US + np.arange(20) * S, **readings(20))
        process_touched(now_us=NOON_US + 20 * S)
        with CaptureQueriesContext(connection) as queries:
            roll_up_due(NOON_US + 20 * S)
        counts.append(len(queries))
    assert counts[0] == counts[1]
