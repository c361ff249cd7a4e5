"""Where a tap declares float32, its numbers are kept as such in blocks and files, and not one bit is lost by it."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from ingest.models import DayFile, Tap
from ingest.store.append import write_blocks
from ingest.store.columns import narrowed
from ingest.store.days.open import DayEntry, OpenDay
from ingest.store.days.seal import seal_day
from ingest.store.seal import seal_tap
from tests.ingest.conftest import two_port
from tests.ingest.store.days.conftest import DAY_US
from tests.ingest.store.test_codec import some_readings

any_number = st.one_of(st.floats(), st.floats(width=32), st.sampled_from([0.1, -0.0, np.nan, np.inf, 1e300, 5e-324]))


@given(hnp.arrays(np.float64, st.integers(1, 50), elements=any_number))
def test_a_column_is_narrowed_only_where_every_bit_comes_back(values):
    readings = some_readings(len(values), columns=("port1",))
    readings.columns["port1"] = values
    narrow = narrowed(readings).columns["port1"]
    assert narrow.astype(np.float64).tobytes() == values.tobytes()


@pytest.fixture
def declared(sender):
    """The station whose tap declares float32."""
    Tap.objects.filter(name="eom-in").update(is_float32=True)
    return sender


def dtypes(tap):
    row = DayFile.objects.get(tap=tap)
    with OpenDay(DayEntry(row.name, row.size, row.footer_size, bytes(row.checks))) as day:
        return day.columns()


def test_decimals_of_a_declared_source_become_the_float32_they_were_written_of(declared):
    body = two_port(0, 3, start_us=DAY_US)
    body["taps"]["eom-in"] |= {"port1": [0.1, 0.2, 1e-3], "averaged": [2**24 + 1, 5, 6]}
    declared.send(body)
    assert declared.send(body)["known"] == 3, "known before it is sealed"
    expected = np.array([0.1, 0.2, 1e-3], np.float32).astype(np.float64)
    np.testing.assert_array_equal(declared.stored().columns["port1"], expected)
    seal_tap(declared.tap().pk)
    assert declared.send(body)["known"] == 3, "and in its block"
    seal_day(declared.tap().pk, DAY_US)
    assert declared.send(body)["known"] == 3, "and in its file"
    np.testing.assert_array_equal(declared.stored().columns["port1"], expected)
    assert declared.stored().columns["averaged"].tolist() == [2**24 + 1, 5, 6], "a count is not rounded"
    assert dtypes(declared.tap()) == {"port1": "f4", "port2": "f4", "averaged": "f8"}


def test_readings_from_before_the_declaration_lose_nothing(declared):
    write_blocks(declared.tap(), np.array([DAY_US]), {"port1": np.array([0.1]), "port2": np.array([0.5])})
    declared.send(two_port(10, 2, start_us=DAY_US))
    seal_tap(declared.tap().pk)
    seal_day(declared.tap().pk, DAY_US)
    assert declared.stored().columns["port1"][0] == 0.1 and dtypes(declared.tap())["port1"] == "f8"


def test_without_a_declaration_all_is_float64(sender):
    sender.send(two_port(0, 3, start_us=DAY_US, temperature_c=[0.5, 0.25, 1.0]))
    seal_tap(sender.tap().pk)
    seal_day(sender.tap().pk, DAY_US)
    assert set(dtypes(sender.tap()).values()) == {"f8"}
