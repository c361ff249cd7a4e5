"""What goes into a day file comes back to the last bit, pandas alone can read it, and damage anywhere is seen."""

import io
import json

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
from django.core.files.base import ContentFile
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from ingest.store.arrays import DamagedBody
from ingest.store.columns import NO_SEQUENCE, NO_TIME, Readings
from ingest.store.days.layout import DayAbout, schema_of
from ingest.store.days.open import DayEntry, MissingFile, OpenDay, read_day
from ingest.store.days.storage import days_storage
from ingest.store.days.write import DayWriter
from tests.ingest.store.test_codec import assert_same, some_readings

EVER = (-(2**62), 2**62)
floats = st.one_of(st.floats(), st.floats(1e-9, 1e-3), st.sampled_from([0.0, -0.0, np.nan, np.inf]))


def written(readings, *, pieces=1, about=None):
    """The bytes of a file of these readings and what is to be known of it."""
    columns = {name: values.dtype.str[1:] for name, values in readings.columns.items()}
    boots = {number: f"boot{number}" for number in np.unique(readings.boot_id).tolist()}
    about = about or DayAbout("b08", "eom-in", "two-port", "mW", "2031-02-27", columns, readings.unknown is not None, boots)
    sink = io.BytesIO()
    writer = DayWriter(sink, schema_of(about), boots)
    for part in np.array_split(np.arange(len(readings)), pieces):
        writer.add(readings.pick(slice(int(part[0]), int(part[-1]) + 1)))
    return sink, writer.finish()


def kept(readings, **how):
    """The same as a file of the storage."""
    sink, facts = written(readings, **how)
    name = f"test/{np.random.default_rng().integers(2**60)}.parquet"
    days_storage().save(name, ContentFile(sink.getvalue()))
    return DayEntry(name, facts.size, facts.footer_size, facts.checks)


@st.composite
def any_readings(draw):
    count = draw(st.integers(1, 120))
    whole = hnp.arrays(np.int64, count, elements=st.integers(-(2**61), 2**61))
    at_us = np.sort(draw(hnp.arrays(np.int64, count, elements=st.integers(-(2**55), 2**55))))
    own = np.where(draw(hnp.arrays(np.bool_, count)), NO_TIME, draw(whole))
    sequence = np.where(draw(hnp.arrays(np.bool_, count)), NO_SEQUENCE, np.abs(draw(whole)))
    columns = {"port1": draw(hnp.arrays(np.float64, count, elements=floats)),
               "port2": draw(hnp.arrays(np.float32, count, elements=st.floats(width=32)))}
    texts = np.array(draw(st.lists(st.sampled_from(["", '{"lamp": 3}', '{"ö": "µ"}']), min_size=count, max_size=count)), object)
    unknown = texts if (texts != "").any() else None
    return Readings(at_us, columns, draw(hnp.arrays(np.int64, count, elements=st.integers(1, 2**40))), sequence, own, draw(whole),
                    draw(whole), draw(hnp.arrays(np.bool_, count)), unknown)


@settings(deadline=None)
@given(any_readings())
def test_all_comes_back_to_the_last_bit(readings):
    entry = kept(readings)
    with OpenDay(entry) as day:
        back = day.read([0], as_sent=True)
    assert_same(readings, back)
    for name, values in readings.columns.items():
        assert back.columns[name].dtype == values.dtype and back.columns[name].tobytes() == values.tobytes()


def test_pandas_alone_reads_it():
    """What docs/day-files.md promises to somebody who has the file and pandas, nothing of ours."""
    readings = some_readings(500)
    sink, _ = written(readings)
    frame = pd.read_parquet(io.BytesIO(sink.getvalue()))
    assert str(frame["at"].dtype) == "datetime64[us, UTC]"
    assert (frame["at"].astype("int64") == readings.at_us).all()
    assert (frame["port1"].to_numpy() == readings.columns["port1"]).all()
    assert set(frame["boot"]) == {"boot4", "boot9"}
    assert frame["own_at_offset_us"].isna().sum() == (readings.own_at_us == NO_TIME).sum()
    facts = json.loads(pq.read_schema(io.BytesIO(sink.getvalue())).metadata[b"labmon"])
    assert facts == {"form": "labmon day file 1", "station": "b08", "tap": "eom-in", "kind": "two-port", "unit": "mW",
                     "day": "2031-02-27"}
    assert pq.read_schema(io.BytesIO(sink.getvalue())).field("port1").metadata[b"unit"] == b"mW"


@pytest.mark.parametrize(("low", "high"), [(0, 500), (0, 1), (123, 124), (99, 301), (499, 500)])
def test_a_span_gives_its_readings_and_opens_only_what_holds_them(low, high, monkeypatch):
    readings = some_readings(500)
    entry = kept(readings, pieces=5)
    filled = []
    fill = OpenDay._fill
    monkeypatch.setattr(OpenDay, "_fill", lambda self, *how: (filled.append(how[1]), fill(self, *how))[1])
    until_us = int(readings.at_us[high]) if high < 500 else 2**62
    assert_same(readings.pick(slice(low, high)), read_day(entry, int(readings.at_us[low]), until_us))
    groups = (high - 1) // 100 - low // 100 + 1
    assert len(filled) == 1 + 9 * groups, "footer, and seven fixed columns and two values a row group"


def test_only_wanted_columns_are_read():
    readings = some_readings(300)
    found = read_day(kept(readings), *EVER, frozenset({"port2"}))
    assert list(found.columns) == ["port2"] and (found.columns["port2"] == readings.columns["port2"]).all()


@pytest.mark.parametrize("every", [11, pytest.param(1, marks=pytest.mark.slow)])
def test_a_changed_byte_anywhere_is_seen(every):
    """Parquet's own page checksums leave page headers out: bytes of the file are turned over, one at a time."""
    sink, facts = written(some_readings(40))
    whole = sink.getvalue()
    entry = kept(some_readings(40))
    boot = pq.read_metadata(io.BytesIO(whole)).row_group(0).column(2)
    unused = range(boot.dictionary_page_offset, boot.dictionary_page_offset + boot.total_compressed_size)
    with open(days_storage().path(entry.name), "r+b", buffering=0) as file:
        for place in range(4, facts.size, every):   # the first four are Parquet's mark, which no reading depends on
            if place not in unused:                 # the boot's text, which the reader does not use
                file.seek(place)
                file.write(bytes([whole[place] ^ 0xFF]))
                with pytest.raises(DamagedBody):
                    read_day(entry, *EVER)
                file.seek(place)
                file.write(whole[place:place + 1])
    assert_same(some_readings(40), read_day(entry, *EVER))


def test_a_file_cut_off_or_gone_is_named():
    sink, facts = written(some_readings(40))
    days_storage().save("test/short.parquet", ContentFile(sink.getvalue()[:-30]))
    with pytest.raises(DamagedBody, match="short.parquet"):
        read_day(DayEntry("test/short.parquet", facts.size, facts.footer_size, facts.checks), *EVER)
    with pytest.raises(MissingFile, match=r"nobody.parquet cannot be opened"):
        read_day(DayEntry("test/nobody.parquet", facts.size, facts.footer_size, facts.checks), *EVER)
    days_storage().delete("test/short.parquet")


def test_a_column_with_a_name_of_the_layout_is_refused():
    about = DayAbout("b08", "x", "two-port", "W", "2031-02-27", {"arrival": "f8"}, False, {})
    with pytest.raises(ValueError, match="arrival.*rename"):
        schema_of(about)


def test_pieces_come_in_order():
    readings = some_readings(20)
    about = DayAbout("b08", "x", "two-port", "W", "2031-02-27", {"port1": "f8", "port2": "f8"}, False, {})
    writer = DayWriter(io.BytesIO(), schema_of(about), {})
    writer.add(readings.pick(slice(10, 20)))
    with pytest.raises(ValueError, match="write in order"):
        writer.add(readings.pick(slice(0, 10)))
