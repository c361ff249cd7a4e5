import io

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.files.faults import FileFault
from ingest.files.guess import guess_encoding, propose
from ingest.files.mapping import mapping_of

LOGGER = """Bench 3
serial;123

Datum;Zeit;P1 (uW);P2 (uW);Temp (°C)
;;uW;uW;C
28.02.2025;14:41:28,50;1,25;0,0012;21,3
28.02.2025;14:41:30,50;1,26;0,0013;21,3
28.02.2025;14:41:32,50;1,26;0,0013;21,4
"""


def proposed(content: str | bytes, *, kind: str = "two-port", unit: str = "mW"):
    return propose(io.BytesIO(content if isinstance(content, bytes) else content.encode()), kind=kind, unit=unit)


def test_a_logger_with_local_habits():
    seen = proposed(LOGGER.encode("cp1252"))
    assert seen.rules["file"] == {"encoding": "cp1252", "delimiter": ";", "decimal": ",", "comment": "", "header": True,
                                  "skip_lines": 3, "skip_after_header": 1}
    assert seen.rules["time"] == {"columns": ["Datum", "Zeit"], "format": "%d.%m.%Y %H:%M:%S,%f"}
    assert seen.rules["columns"] == {"port1": {"column": "P1 (uW)", "unit": "uW"}, "port2": {"column": "P2 (uW)", "unit": "uW"},
                                     "temperature_c": {"column": "Temp (°C)", "unit": "degC"}}
    assert seen.interval_s == 2.0
    rules = seen.rules | {"time": seen.rules["time"] | {"zone": "Europe/Berlin"}}
    assert mapping_of(rules, kind="two-port", unit="mW").layout.skip_lines == 3


def test_a_line_that_is_no_reading_does_not_change_the_delimiter():
    seen = proposed(LOGGER.replace("1,26;0,0013;21,4", "x;0,0013;21,4"))
    assert seen.rules["file"]["delimiter"] == ";" and seen.rules["time"]["columns"] == ["Datum", "Zeit"]


def test_a_zone_is_never_guessed():
    assert "zone" not in proposed(LOGGER).rules["time"]


@pytest.mark.parametrize("delimiter", [",", ";", "\t", "|", " "])
@pytest.mark.parametrize("decimal", [".", ","])
def test_delimiter_and_decimal_sign(delimiter, decimal):
    if delimiter == decimal:
        return
    lines = [delimiter.join(["a", "b", "c"])]
    lines += [delimiter.join([f"2025-02-28T14:41:{second:02d}", f"1.{second}".replace(".", decimal), "2.5".replace(".", decimal)])
              for second in range(20)]
    layout = proposed("\n".join(lines)).rules["file"]
    assert (layout["delimiter"], layout["decimal"], layout["header"]) == (delimiter, decimal, True)


def test_a_file_without_names():
    seen = proposed("# a comment\n2025-02-28 14:41:28\t1.0\t0.001\n2025-02-28 14:41:29\t1.0\t0.002\n")
    assert seen.rules["file"]["header"] is False and seen.rules["file"]["comment"] == "#"
    assert seen.rules["time"]["columns"] == [1]
    assert seen.rules["columns"] == {"port1": {"column": 2, "unit": "mW"}, "port2": {"column": 3, "unit": "mW"}}


def test_day_and_month_that_cannot_be_told_apart_are_pointed_out():
    assert any("Day and month" in note for note in proposed("t,a,b\n03/02/2025 12:00:00,1,2\n").notes)
    assert not proposed("t,a,b\n23/02/2025 12:00:00,1,2\n").notes


def test_a_counted_time_asks_for_its_start():
    seen = proposed("t_ms,s0,s1,s2,s3\n0,1,1,0,0\n100,1,1,0,0\n", kind="stokes")
    assert seen.rules["time"] == {"columns": ["t_ms"], "format": "milliseconds since"} and seen.interval_s == 0.1
    assert any("say when the count began" in note for note in seen.notes)
    assert seen.rules["columns"]["s3"] == {"column": "s3", "unit": "mW"}


def test_no_numbers_no_proposal():
    assert any("No lines of numbers" in note for note in proposed("hello\nworld\n").notes)


def test_encodings():
    assert guess_encoding("é".encode("utf-16")) == "utf-16"
    assert guess_encoding("aé".encode()[:2]) == "utf-8"
    assert guess_encoding("°C;1".encode("cp1252")) == "cp1252"


@settings(deadline=None)
@given(st.binary(max_size=300) | st.text(alphabet="0123456789.,;:-/ \t\n\"ab#", max_size=200).map(str.encode))
def test_any_start_of_a_file_gives_a_proposal(content):
    try:
        seen = proposed(content)
    except FileFault:
        return
    assert len(seen.first_lines) <= 20
