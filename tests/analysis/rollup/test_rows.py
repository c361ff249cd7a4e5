import numpy as np
import pytest

from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from analysis.rollup.cells import cells_of, holds_us
from analysis.rollup.rows import cells_of_rows, row_bodies


@pytest.fixture
def cells():
    generator = np.random.default_rng(5)
    at_us = np.arange(100) * 1_000_000
    columns = {"port1": 1e-3 * (1 + 0.01 * generator.standard_normal(100)), "port2": 1e-6 * generator.standard_normal(100)}
    return cells_of(reduce_tap("two-port", "W", at_us, columns, TapCalibration(floor2=1e-8)), 10, holds_us(at_us, 1.0))


def test_cells_come_back_as_they_were(cells):
    back = cells_of_rows(row_bodies(cells), 10, cells.tap, cells.bucket_us)
    assert back.values.tobytes() == cells.values.tobytes()
    for name in ("cell", "bin", "count"):
        np.testing.assert_array_equal(getattr(back.er_histogram, name), getattr(cells.er_histogram, name))


def test_no_cells_are_no_bodies(cells):
    assert row_bodies(cells.take(np.empty(0, dtype=np.int64))) == []


def test_foreign_body_is_refused_with_a_remedy(cells):
    with pytest.raises(ValueError, match="make the rollups anew"):
        cells_of_rows([b"\x07abc"], 10, cells.tap[:1], cells.bucket_us[:1])
