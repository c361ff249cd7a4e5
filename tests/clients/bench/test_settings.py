"""Every fault of a settings file is told with its line and a remedy, all at once."""

import pytest
from labmon_bench.__main__ import EXAMPLE
from labmon_bench.settings import CsvSettings, InstrumentSettings, SettingsFault, read_settings, station_key

GOOD = "[bench]\ndoor = http://192.0.2.10:8000\nkey_file = station.key\n\n[tap eom-in]\nsource = stdin\ncolumns = port1 port2\n"


def fault_of(tmp_path, text):
    (tmp_path / "bench.ini").write_text(text)
    with pytest.raises(SettingsFault) as caught:
        read_settings(tmp_path / "bench.ini")
    return str(caught.value).splitlines()


def test_the_example_is_good(tmp_path):
    (tmp_path / "bench.ini").write_text(EXAMPLE)
    settings = read_settings(tmp_path / "bench.ini")
    tap, = settings.taps
    assert isinstance(tap.source, InstrumentSettings) and tap.source.ask[0].columns == ("port1", "port2")
    assert settings.spool == tmp_path / "bench.spool" and settings.key_file == tmp_path / "station.key"


@pytest.mark.parametrize(("old", "new", "said"), [
    ("door = http://192.0.2.10:8000\n", "", "bench.ini line 1: [bench] door: is missing; write"),
    ("http://192.0.2.10:8000", "192.0.2.10", "bench.ini line 2: [bench] door = 192.0.2.10: is no address"),
    ("http://192.0.2.10:8000", "http://192.0.2.10:8000/api", "has a path"),
    ("http://192.0.2.10:8000", "http://192.0.2.10:99999", "write for instance door = http"),
    ("key_file = station.key\n", "", "LABMON_BENCH_KEY"),
    ("key_file", "keyfile", "line 3: [bench] keyfile = station.key: is no entry of this section; perhaps key_file was meant"),
    ("[tap eom-in]", "[tap EOM]", "'EOM' is no tap's name"),
    ("[tap eom-in]", "[eom-in]", "bench.ini line 5: [eom-in]: is no section; write [bench] or [tap NAME]"),
    ("source = stdin", "source = usb", "bench.ini line 6: [tap eom-in] source = usb: is none of instrument"),
    ("source = stdin\n", "", "source"),
    ("port1 port2", "Port1 port2", "'Port1' is no column"),
    ("[bench]\n", "[bench]\nspool_mb = much\n", "line 2: [bench] spool_mb = much: is no number; write for instance"),
    ("[bench]\n", "[bench]\nspool_mb = -1\n", "is not above"),
    ("[bench]\n", "[bench]\nreport_health = perhaps\n", "is neither yes nor no"),
    ("[bench]\n", "[bench]\ndoor = http://a\n", "bench.ini line 3: [bench] door: stands twice"),
    ("[bench]\n", "", "bench.ini line 1: stands before any section"),
    ("[bench]\n", "[bench]\nnonsense\n", "bench.ini line 2"),
    ("columns", "read_evry_s = 1\ncolumns", "read_evry_s = 1: is no entry"),
])
def test_a_fault_is_named_with_its_line_and_a_remedy(tmp_path, old, new, said):
    text = GOOD.replace(old, new, 1)
    assert text != GOOD
    assert any(said in line for line in fault_of(tmp_path, text)), fault_of(tmp_path, text)


def test_all_faults_come_at_once_in_the_order_of_lines(tmp_path):
    text = GOOD.replace("http", "ftp").replace("stdin", "function").replace("columns = port1 port2", "function = nothing")
    lines = fault_of(tmp_path, text)
    assert len(lines) == 2 and lines[0].startswith("bench.ini line 2") and lines[1].startswith("bench.ini line 7")


def test_a_missing_file_and_a_binary_one(tmp_path):
    with pytest.raises(SettingsFault, match="cannot be read"):
        read_settings(tmp_path / "none.ini")
    (tmp_path / "b.ini").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(SettingsFault, match="UTF-8"):
        read_settings(tmp_path / "b.ini")


def test_an_instruments_queries_may_hold_any_sign(tmp_path):
    text = GOOD.replace("source = stdin\ncolumns = port1 port2\n",
                        "source = instrument\naddress = ASRL1::INSTR\nask =\n  port1: READ? 1;X=5%\n  - port2: SENS:DATA?\n")
    (tmp_path / "bench.ini").write_text(text)
    asks = read_settings(tmp_path / "bench.ini").taps[0].source.ask
    assert [(ask.columns, ask.query) for ask in asks] == [(("port1",), "READ? 1;X=5%"), (("-", "port2"), "SENS:DATA?")]


def test_a_files_columns_and_time(tmp_path):
    lines = ("source = csv\nfile = p.csv\ncolumns =\n  port1: Power: A\n  port2: 3\ntime = Date + Time\ntime_zone = +01:00\n"
             "decimal = ,\n")
    (tmp_path / "bench.ini").write_text(GOOD.replace("source = stdin\ncolumns = port1 port2\n", lines))
    source = read_settings(tmp_path / "bench.ini").taps[0].source
    assert isinstance(source, CsvSettings) and source.columns == (("port1", "Power: A"), ("port2", "3"))
    assert source.time_columns == ("Date", "Time") and source.zone.utcoffset(None).total_seconds() == 3600
    assert not source.is_from_start
    cases = (("+01:00", "Europe/Berlin", "none of local, utc"), ("time = Date + Time", "begin = start", "need a time"),
             ("time = Date + Time", "encoding = utf-16", "more than one byte"),
             ("  port1: Power: A", "  port1", "not of the form"))
    for old, new, said in cases:
        text = GOOD.replace("source = stdin\ncolumns = port1 port2\n", lines.replace(old, new))
        assert any(said in line for line in fault_of(tmp_path, text))


def test_the_key_is_read_anew_each_time(tmp_path):
    (tmp_path / "bench.ini").write_text(GOOD)
    settings = read_settings(tmp_path / "bench.ini")
    with pytest.raises(SettingsFault, match="cannot be read"):
        station_key(settings)
    for text, key in (("one\n", "one"), ("\ufefftwo\r\n", "two")):
        (tmp_path / "station.key").write_text(text, encoding="utf-8")
        assert station_key(settings) == key
    for text in ("", "two words", "kéy"):
        (tmp_path / "station.key").write_text(text, encoding="utf-8")
        with pytest.raises(SettingsFault, match="holds no key"):
            station_key(settings)
