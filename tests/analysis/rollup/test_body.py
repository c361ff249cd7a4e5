"""Cells as bytes."""

import numpy as np
import pytest
from hypothesis import given

from analysis.rollup.body import bytes_of, cells_from
from analysis.rollup.cells import CELL, cells_of, empty_cells, holds_us
from tests.strategies import two_port_samples


@given(two_port_samples(max_size=80))
def test_bytes_and_back(reduced):
    cells = cells_of(reduced, 10, holds_us(reduced.at_us, 1.0))
    back = cells_from(bytes_of(cells), tap=7)
    assert back.level_s == 10 and (back.tap == 7).all()
    np.testing.assert_array_equal(back.bucket_us, cells.bucket_us)
    for name in CELL.names:
        np.testing.assert_array_equal(back.values[name], cells.values[name])
    for name in ("cell", "bin", "count"):
        np.testing.assert_array_equal(getattr(back.er_histogram, name), getattr(cells.er_histogram, name))


def test_no_cells():
    assert len(cells_from(bytes_of(empty_cells(3600)))) == 0


@pytest.mark.parametrize(
    "body", [b"", b"nothing of ours, but long enough", bytes_of(empty_cells(10)).replace(b"cell\x01", b"cell\x09")]
)
def test_other_bytes_are_refused_with_a_remedy(body):
    with pytest.raises(ValueError, match="recompute them"):
        cells_from(memoryview(body))
