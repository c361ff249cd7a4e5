"""Cells as bytes."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given

from analysis.rollup.body import FRAMES, LAYOUT, Packed, cells_of_packed, columns_of, packed
from analysis.rollup.cells import CELL, cells_of, empty_cells, holds_us
from tests.strategies import two_port_samples


@given(two_port_samples(max_size=80))
def test_bytes_and_back(reduced):
    cells = cells_of(reduced, 10, holds_us(reduced.at_us, 1.0))
    found = packed(cells)
    back = cells_of_packed(found, LAYOUT, 10, tap=7)
    assert back.level_s == 10 and (back.tap == 7).all()
    np.testing.assert_array_equal(back.bucket_us, cells.bucket_us)
    for name in CELL.names:
        np.testing.assert_array_equal(back.values[name], cells.values[name])
    for name in ("cell", "bin", "count"):
        np.testing.assert_array_equal(getattr(back.er_histogram, name), getattr(cells.er_histogram, name))
    place = FRAMES.index("trusted_us")
    frame = found.body[found.ends[place - 1] : found.ends[place]]
    one = columns_of(["trusted_us"], [frame], found.count, LAYOUT)["trusted_us"]
    np.testing.assert_array_equal(one, cells.values["trusted_us"])


def test_no_cells():
    assert len(cells_of_packed(packed(empty_cells(3600)), LAYOUT, 3600)) == 0


def test_other_bytes_are_refused_with_a_remedy():
    good = packed(empty_cells(10))
    faults = [(good, LAYOUT + 1), (Packed(0, [3], b"abc"), LAYOUT), (replace(good, body=b"x" * len(good.body)), LAYOUT),
              (replace(good, count=5), LAYOUT)]
    for found, layout in faults:
        with pytest.raises(ValueError, match="recompute them"):
            cells_of_packed(found, layout, 10)
