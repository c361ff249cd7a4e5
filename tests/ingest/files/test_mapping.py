import copy
import json

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.files.mapping import ColumnRule, MappingError, mapping_from_toml, mapping_of, rules_of
from ingest.files.written import toml_of

TWO_PORT = '''
[file]
encoding = "cp1252"
delimiter = "semicolon"
decimal = ","
skip_lines = 3
skip_after_header = 1
comment = "#"
missing = ["-99.99", "n/a"]

[time]
columns = ["Date", "Time"]
format = "%d.%m.%Y %H:%M:%S,%f"
zone = "Europe/Berlin"
at_turn_back = "first"

[columns]
port1 = "Power A"
port2 = { column = 4, unit = "uW", factor = 2.0 }
temperature_c = { column = "T", unit = "K" }
'''


COUNTED = """
[file]
header = false
[time]
column = 1
format = "seconds since"
since = SINCE
[columns]
port2 = 2
"""


def two_port(text: str = TWO_PORT):
    return mapping_from_toml(text, kind="two-port", unit="mW")


def faults_of(text: str, kind: str = "two-port", unit: str = "mW") -> str:
    with pytest.raises(MappingError) as caught:
        mapping_from_toml(text, kind=kind, unit=unit)
    return str(caught.value)


def test_what_the_text_says():
    mapping = two_port()
    assert (mapping.layout.delimiter, mapping.layout.decimal, mapping.layout.missing) == (";", ",", ("-99.99", "n/a"))
    assert mapping.time.columns == ("Date", "Time") and mapping.time.at_turn_back == "first"
    assert mapping.columns[0] == ColumnRule(name="port1", source="Power A", unit="mW")
    assert mapping.columns[1] == ColumnRule(name="port2", source=4, unit="uW", factor=2.0)


def test_saved_and_written_mappings_come_back_the_same():
    mapping = two_port()
    assert mapping_of(json.loads(json.dumps(rules_of(mapping))), kind="two-port", unit="mW") == mapping
    assert two_port(toml_of(mapping)) == mapping


@pytest.mark.parametrize(("old", "new", "says"), [
    ('decimal = ","', 'decimal = ";"', 'file.decimal = ";": is not one of the possible words; use ., ,'),
    ('delimiter = "semicolon"', 'delimiter = ","', 'file.decimal = ",": is also the delimiter; use another delimiter'),
    ('delimiter = "semicolon"', 'delimiter = "xx"', 'file.delimiter = "xx": is not one separating character; write one'),
    ('encoding = "cp1252"', 'encoding = "base64"', 'file.encoding = "base64": is not an encoding known here; write for'),
    ("skip_lines = 3", "skip_lines = -1", "file.skip_lines = -1: is not a number of lines; write a whole number"),
    ("skip_lines = 3", "skip_line = 3", "file.skip_line = 3: nobody knows this entry; use delimiter"),
    ('zone = "Europe/Berlin"', 'zone = "Europe/Berln"', 'time.zone = "Europe/Berln": is no time zone; write a name such as'),
    ('zone = "Europe/Berlin"', "", "time.zone = (missing): times of this format have no zone; say where the clock stands"),
    ('"%d.%m.%Y %H:%M:%S,%f"', '"%H:%M"', 'time.format = "%H:%M": does not give date and time; write "iso"'),
    ('"%d.%m.%Y %H:%M:%S,%f"', '"seconds since"', "time.since = (missing): a counted time needs a start; write for instance"),
    ('at_turn_back = "first"', 'at_turn_back = "both"', 'time.at_turn_back = "both": is not one of the possible words; use set'),
    ('columns = ["Date", "Time"]', "", "time.column = (missing): no column is named; write column ="),
    ('port1 = "Power A"', "", 'columns = "port2, temperature_c": a two-port tap needs port1 and port2; say which'),
    ('port1 = "Power A"', 'port9 = "Power A"', 'columns.port9 = "Power A": is not a column of a two-port tap; use port1, port2'),
    ('unit = "uW"', 'unit = "kg"', 'columns.port2.unit = "kg": is not one of the possible words; use mW, W, uW, nW, dBm'),
    ("factor = 2.0", "factor = 0", "columns.port2.factor = 0.0: would make every value the same; leave it out"),
    ("factor = 2.0", "factor = nan", "columns.port2.factor = nan: is not a finite number; write a number"),
    ("column = 4", "column = 0", "columns.port2.column = 0: is not a column of the file; write its name from the header"),
    ("skip_lines = 3", "header = false", 'columns.port1 = "Power A": the file has no header line (file.header = false); give'),
])
def test_a_fault_names_key_value_and_remedy(old, new, says):
    assert old in TWO_PORT
    assert says in faults_of(TWO_PORT.replace(old, new))


def test_all_faults_are_told_at_once():
    text = TWO_PORT.replace('"Europe/Berlin"', '"X"').replace('"uW"', '"kg"').replace("= 3", "= 3.5")
    assert len(faults_of(text).splitlines()) == 3


def test_a_start_with_zone_needs_no_other_zone():
    text = COUNTED.replace("SINCE", "2025-02-28T14:41:28.5+01:00")
    assert mapping_from_toml(text, kind="dark-port", unit="V").time.since == "2025-02-28T14:41:28.500000+01:00"
    assert "the start has no zone" in faults_of(text.replace("+01:00", ""), kind="dark-port", unit="V")


def test_a_start_in_the_hour_that_happened_twice_is_refused():
    text = COUNTED.replace("SINCE", '2025-10-26T02:30:00\nzone = "Europe/Berlin"')
    assert "is not a start that happened once" in faults_of(text, kind="dark-port", unit="V")


@pytest.mark.parametrize("text", ["", "x", "[time]", "file = 1\ntime = 2\ncolumns = []", "[columns]\nport1 = {a = {}}",
                                  "time = [[1]]"])
def test_short_nonsense_is_told_in_words(text):
    assert faults_of(text)


values = st.recursive(st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=12),
                      lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
                      max_leaves=6)


@settings(deadline=None)
@given(st.sampled_from(["file", "time", "columns"]), st.sampled_from(
    ["encoding", "delimiter", "decimal", "skip_lines", "header", "missing", "comment", "column", "columns", "format", "since",
     "zone", "at_turn_back", "port1", "port2", "unit"]), values)
def test_any_value_anywhere_gives_a_mapping_or_faults(table, key, value):
    rules = copy.deepcopy(rules_of(two_port()))
    rules[table][key] = value
    try:
        mapping = mapping_of(rules, kind="two-port", unit="mW")
    except MappingError as error:
        faults = error.faults
    else:
        assert two_port(toml_of(mapping)) == mapping
        return
    assert faults and all(fault.key and fault.why and fault.do for fault in faults)


@settings(deadline=None)
@given(st.text(max_size=60))
def test_any_text_gives_a_mapping_or_faults(text):
    assert faults_of(text)
