"""What the user wants: one short INI file, read into frozen settings."""

from __future__ import annotations

import os
import re
import urllib.parse
from dataclasses import dataclass
from datetime import timedelta, timezone, tzinfo
from pathlib import Path
from typing import Union

from labmon_bench.entries import Entries, Section, SettingsFault

KEY_VARIABLE = "LABMON_BENCH_KEY"
_SHORT_NAME = re.compile(r"[a-z0-9][a-z0-9-]{0,62}")
_COLUMN = re.compile(r"[a-z][a-z0-9_]{0,63}")
_DELIMITERS = {"comma": ",", "semicolon": ";", "tab": "\t", "bar": "|", "blanks": " "}
_OFFSET = re.compile(r"([+-])(\d\d):(\d\d)")


@dataclass(frozen=True)
class Ask:
    """One query to an instrument and the columns that its answer fills."""

    columns: tuple[str, ...]
    query: str


@dataclass(frozen=True)
class InstrumentSettings:
    """An instrument that speaks SCPI, reached through VISA."""

    address: str
    backend: str
    ask: tuple[Ask, ...]
    at_open: tuple[str, ...]
    expect: str
    timeout_s: float
    baud: int
    ending: str


@dataclass(frozen=True)
class SerialSettings:
    """A board that writes lines of numbers to a serial port."""

    port: str
    baud: int
    columns: tuple[str, ...]


@dataclass(frozen=True)
class StdinSettings:
    """Another program that writes lines of numbers to our standard input."""

    columns: tuple[str, ...]


@dataclass(frozen=True)
class FunctionSettings:
    """A Python function of the user's that gives a map from column to number."""

    file: Path
    name: str


@dataclass(frozen=True)
class CsvSettings:
    """A table of text that another program goes on writing.

    Attributes:
        time_columns: Empty where lines have no time of their own and are stamped when seen.
        zone: None for the PC's own zone.
    """

    file: Path
    columns: tuple[tuple[str, str], ...]
    delimiter: str
    decimal: str
    encoding: str
    skip_lines: int
    has_header: bool
    time_columns: tuple[str, ...]
    time_format: str
    zone: tzinfo | None
    is_from_start: bool


SourceSettings = Union[InstrumentSettings, SerialSettings, StdinSettings, FunctionSettings, CsvSettings]


@dataclass(frozen=True)
class TapSettings:
    """One tap: its name at the door, and where its readings come from."""

    tap: str
    source: SourceSettings
    read_every_s: float


@dataclass(frozen=True)
class BenchSettings:
    """Everything in the settings file."""

    path: Path
    door: str
    key_file: Path | None
    key: str
    ca_file: str
    spool: Path
    spool_mb: float
    send_every_s: float
    timeout_s: float
    mains_hz: float
    log_file: Path | None
    is_health_reported: bool
    taps: tuple[TapSettings, ...]


def read_settings(path: Path) -> BenchSettings:
    """The settings of a file; relative paths in it count from its folder.

    Raises:
        SettingsFault: Everything that is wrong, one line each.
    """
    path = path.absolute()
    entries = Entries(path)
    for name in entries.sections:
        if name != "bench" and not name.startswith("tap "):
            entries.fault(name, "", "is no section; write [bench] or [tap NAME]")
    taps = tuple(_tap_settings(entries.section(name), path.parent) for name in entries.sections if name.startswith("tap "))
    if not taps:
        entries.fault("bench", "", "no tap is named; add a section such as [tap eom-in]")
    if sum(isinstance(tap.source, StdinSettings) for tap in taps) > 1:
        entries.fault("bench", "", "two taps read standard input; there is only one")
    settings = _bench(entries.section("bench"), path, taps)
    entries.finish()
    return settings


def station_key(settings: BenchSettings) -> str:
    """The station's key as it is now; read anew each time, so that a new key needs no restart.

    Raises:
        SettingsFault: The key file cannot be read or is empty.
    """
    if settings.key_file is None:
        return settings.key
    try:
        key = settings.key_file.read_text(encoding="utf-8-sig").strip()
    except (OSError, UnicodeDecodeError) as error:
        raise SettingsFault(f"key_file {settings.key_file}: cannot be read ({error}); write the station's key into it") from error
    if not key or not key.isascii() or len(key.split()) != 1:
        raise SettingsFault(f"key_file {settings.key_file}: holds no key; write the station's key into it and nothing else")
    return key


def _bench(section: Section, path: Path, taps: tuple[TapSettings, ...]) -> BenchSettings:
    key = section.text("key") or os.environ.get(KEY_VARIABLE, "").strip()
    key_file = section.text("key_file")
    if not key and not key_file:
        section.fault("key_file", f"is missing; write the station's key into a file that only you can read and name it, as in "
                                  f"key_file = station.key (or set {KEY_VARIABLE})")
    log_file = section.text("log_file")
    settings = BenchSettings(
        path=path, door=section.parsed("door", _door_address, "", "http://192.0.2.10:8000"), key=key,
        key_file=path.parent / key_file if key_file else None, ca_file=section.text("ca_file"),
        spool=path.parent / section.text("spool", path.stem + ".spool"),
        spool_mb=section.number("spool_mb", 500.0, above=0.099, below=1e6, example="500"),
        send_every_s=section.number("send_every_s", 1.0, above=0.0, below=3600.0, example="1"),
        timeout_s=section.number("timeout_s", 20.0, above=0.0, below=600.0, example="20"),
        mains_hz=section.number("mains_hz", 50.0, above=-1e-9, below=1000.0, example="50"),
        log_file=path.parent / log_file if log_file else None,
        is_health_reported=section.is_on("report_health", True), taps=taps)
    if "door" not in section.found:
        section.fault("door", "is missing; write labmon's address, as in door = http://192.0.2.10:8000")
    section.finish()
    return settings


def _door_address(text: str) -> str:
    parts = urllib.parse.urlsplit(text)
    if parts.scheme not in {"http", "https"} or not parts.hostname:
        raise ValueError("is no address that begins with http:// or https://")
    if parts.port is not None and not 0 < parts.port < 65536:  # .port raises ValueError of its own for text
        raise ValueError("has no port between 1 and 65535")
    if parts.path.strip("/") or parts.query:
        raise ValueError("has a path; the client adds it by itself")
    return f"{parts.scheme}://{parts.netloc}"


def _tap_settings(section: Section, folder: Path) -> TapSettings:
    tap = section.name[4:].strip()
    if not _SHORT_NAME.fullmatch(tap):
        section.fault("", f"{tap!r} is no tap's name; use small letters, digits and hyphens, as on the station's page")
    makers = {"instrument": _instrument_settings, "serial": _serial, "csv": _csv, "function": _function, "stdin": _stdin}
    kind = section.one_of("source", tuple(makers), "")
    if "source" not in section.found:
        section.fault("source", f"is missing; write source = and one of {', '.join(makers)}")
    every_s = 1.0 if kind in {"serial", "stdin"} else section.number("read_every_s", 1.0, above=0.0, below=86_400.0, example="1")
    if kind not in makers:
        return TapSettings(tap, StdinSettings(()), every_s)
    source = makers[kind](section, folder)
    section.finish()
    return TapSettings(tap, source, every_s)


def _instrument_settings(section: Section, folder: Path) -> InstrumentSettings:
    asks = tuple(Ask(_columns(section, "ask", left), right) for left, right in section.pairs("ask", "port1 port2: READ?"))
    names = [name for ask in asks for name in ask.columns if name != "-"]
    if len(set(names)) < len(names):
        section.fault("ask", "fills a column twice; name each column once")
    backend = section.text("backend")
    if backend.endswith("@sim"):
        backend = f"{folder / backend[:-4]}@sim"
    endings = {"lf": "\n", "cr": "\r", "crlf": "\r\n"}
    return InstrumentSettings(
        address=section.text("address", is_needed=True, example="TCPIP0::192.0.2.20::5025::SOCKET"), backend=backend, ask=asks,
        at_open=tuple(filter(None, map(str.strip, section.text("at_open", "*CLS").splitlines()))),
        expect=section.text("expect"), timeout_s=section.number("timeout_s", 5.0, above=0.0, below=600.0, example="5"),
        baud=int(section.number("baud", 9600, above=0, example="9600")),
        ending=endings[section.one_of("ending", tuple(endings), "lf")])


def _serial(section: Section, folder: Path) -> SerialSettings:
    port = section.text("port", is_needed=True, example="COM3 or /dev/ttyUSB0")
    return SerialSettings(port, int(section.number("baud", 115_200, above=0, example="115200")), _line_columns(section))


def _stdin(section: Section, folder: Path) -> StdinSettings:
    return StdinSettings(_line_columns(section))


def _function(section: Section, folder: Path) -> FunctionSettings:
    file, _, name = section.text("function", is_needed=True, example="ports.py:read_ports").rpartition(":")
    if section.found.get("function") and not (file and name.isidentifier()):
        section.fault("function", "is not of the form file.py:name; write for instance function = ports.py:read_ports")
    return FunctionSettings(folder / file, name)


def _csv(section: Section, folder: Path) -> CsvSettings:
    file = section.text("file", is_needed=True, example="C:\\logs\\power.csv")
    columns = tuple((_columns(section, "columns", left)[0], right) for left, right in section.pairs("columns", "port1: Power A"))
    times = tuple(filter(None, map(str.strip, section.text("time").split("+"))))
    has_header = section.is_on("header", True)
    if not has_header and not all(place.isdigit() and int(place) > 0 for _, place in columns):
        section.fault("columns", "names columns, but header = no; number them from 1, as in port1: 3")
    if not has_header and not all(place.isdigit() for place in times):
        section.fault("time", "names columns, but header = no; number them from 1, as in time = 1")
    is_from_start = section.one_of("begin", ("now", "start"), "now") == "start"
    if is_from_start and not times:
        section.fault("begin", "asks for old lines, which need a time of their own; name the time column, as in time = Time")
    return CsvSettings(
        file=folder / file, columns=columns, delimiter=section.parsed("delimiter", _delimiter, ",", "semicolon"),
        decimal=section.one_of("decimal", (".", ","), "."), encoding=section.parsed("encoding", _encoding, "utf-8", "cp1252"),
        skip_lines=int(section.number("skip_lines", 0, above=-1e-9, example="3")), has_header=has_header,
        time_columns=times, time_format=section.text("time_format", "iso"),
        zone=section.parsed("time_zone", _zone, None, "utc"), is_from_start=is_from_start)


def _columns(section: Section, key: str, text: str) -> tuple[str, ...]:
    names = tuple(text.replace(",", " ").split())
    for name in names:
        if name != "-" and not _COLUMN.fullmatch(name):
            section.fault(key, f"{name!r} is no column; use the names of docs/payload.md, such as port1, port2, temperature_c")
    return names


def _line_columns(section: Section) -> tuple[str, ...]:
    text = section.text("columns", is_needed=True, example="port1 port2")
    return _columns(section, "columns", text)


def _delimiter(text: str) -> str:
    made = _DELIMITERS.get(text, text)
    if len(made) != 1:
        raise ValueError(f"is neither one character nor one of {', '.join(_DELIMITERS)}")
    return made


def _encoding(text: str) -> str:
    try:
        "7".encode(text)
    except LookupError:
        raise ValueError("is no encoding that Python knows") from None
    if "7".encode(text) != b"7":
        raise ValueError("uses more than one byte for a digit, which a growing file cannot be followed by")
    return text


def _zone(text: str) -> tzinfo | None:
    if text == "local":
        return None
    if text == "utc":
        return timezone.utc
    match = _OFFSET.fullmatch(text)
    if not match or int(match[2]) > 15 or int(match[3]) > 59:
        raise ValueError("is none of local, utc and an offset such as +01:00")
    offset = timedelta(hours=int(match[2]), minutes=int(match[3]))
    return timezone(-offset if match[1] == "-" else offset)
