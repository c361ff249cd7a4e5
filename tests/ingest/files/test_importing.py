"""Files into the store and back out of it."""

import gzip
import io
from collections import Counter

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ingest.files.faults import FileFault, MappingError
from ingest.files.importing import ImportBusy, ImportCounts, import_file
from ingest.files.mapping import mapping_from_toml
from ingest.files.saved import ask_for_import, record_import, saved_mapping
from ingest.models import FileImport, SetAside, Station, StationBoot, Tap, Touch
from ingest.store.append import write_blocks
from ingest.store.read import read_readings

pytestmark = pytest.mark.django_db

MAPPING = """
[file]
header = false
comment = "#"
missing = ["-"]
[time]
column = 1
format = "seconds since"
since = 2025-01-01T00:00:00Z
[columns]
port1 = 2
port2 = 3
temperature_c = 4
"""
START_US = 1_735_689_600_000_000
ALL_TIME = (0, 2**61)


@pytest.fixture
def tap() -> Tap:
    return Tap.objects.create(station=Station.objects.create(name="bench"), name="out", kind="two-port", unit="mW")


def read_in(tap: Tap, content: str | bytes, mapping: str = MAPPING) -> ImportCounts:
    raw = io.BytesIO(content.encode() if isinstance(content, str) else content)
    record = record_import(tap, "log.csv", raw)
    ask_for_import(record, mapping_from_toml(mapping, kind=tap.kind, unit=tap.unit))
    return import_file(record, raw)


def held(tap: Tap) -> Counter:
    readings = read_readings(tap.pk, *ALL_TIME)
    return Counter(zip(((readings.at_us - START_US) / 1e6).tolist(), readings.column("port1").tolist(),
                       readings.column("port2").tolist(), strict=True))


FILE = "# log\n0,1.0,0.001,21\n1,1.1,0.002,-\n1,1.1,0.002,-\n1,1.2,0.003,21\n\n2,x,0.001,21\n3,-,0.001,21\n3.5,1.0,-0.001,21\n"


def test_rows_are_stored_known_or_set_aside(tap):
    assert read_in(tap, FILE) == ImportCounts(rows=7, stored=5, known=0, set_aside=2, lines_left_out=2)
    assert held(tap) == Counter({(0.0, 1.0, 0.001): 1, (1.0, 1.1, 0.002): 2, (1.0, 1.2, 0.003): 1, (3.5, 1.0, -0.001): 1})
    readings = read_readings(tap.pk, *ALL_TIME)
    np.testing.assert_array_equal(readings.column("temperature_c"), [21, np.nan, np.nan, 21, 21])
    assert not readings.is_server_timed.any()


def test_again_changes_nothing(tap):
    read_in(tap, FILE)
    before = read_readings(tap.pk, *ALL_TIME)
    touched = Touch.objects.count()
    assert read_in(tap, gzip.compress(FILE.encode())) == ImportCounts(rows=7, stored=0, known=5, set_aside=2, lines_left_out=2)
    after = read_readings(tap.pk, *ALL_TIME)
    assert after.at_us.tobytes() == before.at_us.tobytes() and after.sequence.tobytes() == before.sequence.tobytes()
    assert after.column("port2").tobytes() == before.column("port2").tobytes()
    assert SetAside.objects.count() == 2 and Touch.objects.count() == touched


def test_a_line_set_aside_says_where_why_and_what_to_do(tap):
    read_in(tap, FILE)
    first, second = SetAside.objects.order_by("pk")
    assert (first.field, first.why) == ("port1", '"x" is not a number')
    assert first.reading == {"file": "log.csv", "line": 7, "text": "2,x,0.001,21"}
    assert first.do.startswith("correct the line") and first.station == tap.station and first.tap == tap
    assert second.why == "has no value"


def test_stored_rows_are_touched_for_the_pipeline(tap):
    read_in(tap, FILE)
    touch = Touch.objects.get(tap=tap)
    assert (touch.first_at_us, touch.last_at_us) == (START_US, START_US + 3_500_000)


def test_a_corrected_mapping_sets_aside_instead_of_doubling(tap):
    read_in(tap, FILE)
    before = held(tap)
    other = MAPPING.replace("port1 = 2", 'port1 = { column = 2, unit = "uW" }')
    assert read_in(tap, FILE, other) == ImportCounts(rows=7, stored=0, known=0, set_aside=7, lines_left_out=2)
    assert held(tap) == before
    assert "another mapping" in SetAside.objects.order_by("pk").last().why
    assert read_in(tap, "10,1,1,1\n", other).stored == 1


def test_another_layout_of_the_same_values_is_known(tap):
    read_in(tap, FILE)
    text = "t;T;a;b\n0;21;1,0;0,001\n1;-;1,1;0,002\n3,5;21;1,0;-0,001\n"
    mapping = ('[file]\ndelimiter = ";"\ndecimal = ","\nmissing = "-"\n[time]\ncolumn = "t"\nformat = "seconds since"\n'
               'since = 2025-01-01T00:00:00Z\n[columns]\nport1 = "a"\nport2 = "b"\ntemperature_c = "T"\n')
    assert read_in(tap, text, mapping) == ImportCounts(rows=3, stored=0, known=3, set_aside=0, lines_left_out=1)


def test_readings_of_a_device_hinder_nothing_but_those_without_identity_do(tap):
    write_blocks(tap, np.array([START_US]), {"port1": np.array([5.0]), "port2": np.array([5.0])}, boot="7f3a",
                 sequence=np.array([1]))
    assert read_in(tap, "0,1,1,1\n").stored == 1
    write_blocks(tap, np.array([START_US + 9_000_000]), {"port1": np.array([5.0]), "port2": np.array([5.0])})
    counts = read_in(tap, "9,1,1,1\n9,5,5,-\n")
    assert (counts.known, counts.stored, counts.set_aside) == (1, 1, 0)
    write_blocks(tap, np.array([START_US + 10_000_000]), {"port1": np.array([5.0]), "port2": np.array([5.0])})
    assert read_in(tap, "10,1,1,1\n").set_aside == 1


def test_a_mapping_that_fits_no_row_stops_at_once(tap):
    with pytest.raises(MappingError, match="none of the first 100 rows is a reading; line 1, port1"):
        read_in(tap, "1,a,b,c\n" * 100 + "1,1,1,1\n")
    record = FileImport.objects.get()
    assert "none of the first 100 rows" in record.error and record.finished_at is not None
    assert not SetAside.objects.exists() and not StationBoot.objects.exists()


def test_a_late_good_row_is_enough(tap):
    assert read_in(tap, "1,a,b,c\n" * 99 + "1,1,1,1\n").stored == 1


def test_a_stop_in_the_middle_is_mended_by_importing_again(tap, monkeypatch):
    monkeypatch.setattr("ingest.files.importing.ROWS_A_CHUNK", 100)
    lines = [f"{index},{index % 7},{index % 5},1" for index in range(1000)]
    packed = gzip.compress("\n".join(lines).encode())
    with pytest.raises(FileFault, match="damaged or ends early"):
        read_in(tap, packed[:-200])
    record = FileImport.objects.get()
    assert record.error and 0 < record.stored < 1000
    counts = read_in(tap, packed)
    assert counts.known == record.stored and counts.known + counts.stored == 1000
    assert sum(held(tap).values()) == 1000


def test_one_import_a_tap_at_a_time(tap, transactional_db):
    from ingest.database import connect
    with connect() as other:
        other.execute("SELECT pg_advisory_lock(hashtextextended(%s, 0))", [f"labmon file import {tap.pk}"])
        with pytest.raises(ImportBusy):
            read_in(tap, FILE)
    assert read_in(tap, FILE).stored == 5


def test_counted_times_need_their_start_anew(tap):
    read_in(tap, FILE)
    with pytest.raises(MappingError, match="a counted time needs a start"):
        saved_mapping(tap)
    iso = MAPPING.replace('format = "seconds since"\nsince = 2025-01-01T00:00:00Z', 'zone = "UTC"')
    ask_for_import(record_import(tap, "x", io.BytesIO(b"")), mapping_from_toml(iso, kind=tap.kind, unit=tap.unit))
    assert saved_mapping(tap).time.zone == "UTC"


def test_progress_is_told_and_kept(tap, monkeypatch):
    monkeypatch.setattr("ingest.files.importing.ROWS_A_CHUNK", 2)
    raw = io.BytesIO(FILE.encode())
    record = record_import(tap, "/some/where/log.csv", raw)
    assert (record.file_name, record.rows_total) == ("log.csv", 9)
    ask_for_import(record, mapping_from_toml(MAPPING, kind=tap.kind, unit=tap.unit))
    seen = []
    import_file(record, raw, on_progress=lambda one: seen.append((one.rows_done, one.stored)))
    assert seen == [(2, 2), (4, 4), (6, 4), (7, 5)]
    record.refresh_from_db()
    assert (record.rows_total, record.rows_done, record.stored, record.set_aside) == (7, 7, 5, 2) and record.finished_at


line = st.tuples(st.integers(0, 3), st.sampled_from(["1", "2"]), st.sampled_from(["1", "x", "-"])).map(
    lambda cells: f"{cells[0]},{cells[1]},{cells[2]},\n")


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(line, max_size=10), st.lists(line, max_size=10), st.integers(1, 4), st.booleans())
def test_whatever_order_files_come_in_the_same_is_held(monkeypatch, first, second, part, is_swapped):
    monkeypatch.setattr("ingest.files.importing.ROWS_A_CHUNK", part)
    station = Station.objects.create(name=f"bench-{Station.objects.count()}-{np.random.default_rng().integers(1 << 40)}")
    tap = Tap.objects.create(station=station, name="out", kind="two-port", unit="mW")
    for file in [second, first] if is_swapped else [first, second]:
        counts = read_in(tap, "".join(file))
        assert counts.rows == len(file) == counts.stored + counts.known + counts.set_aside
    good = [Counter(text for text in file if "x" not in text and "-" not in text) for file in (first, second)]
    assert sum(held(tap).values()) == (good[0] | good[1]).total()
    assert read_in(tap, "".join(first)).stored == 0


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(content=st.binary(max_size=120) | st.text(max_size=80).map(lambda text: text.encode("utf-8", "surrogatepass"))
       | st.lists(st.sampled_from(["1", "2.5", "\x00", "\ud800", "nan", "é", '"', ",", ",", "\n", "\n", "-"]), max_size=40).map(
           lambda parts: "".join(parts).encode("utf-8", "surrogatepass")))
def test_any_bytes_are_counted_and_never_break_the_store(tap, content):
    try:
        counts = read_in(tap, content)
    except FileFault:
        return
    assert counts.rows == counts.stored + counts.known + counts.set_aside
    readings = read_readings(tap.pk, *ALL_TIME)
    assert np.isfinite(readings.column("port1")).all() and np.isfinite(readings.column("port2")).all()
