"""When a line was taken: from its time cells, by the rule the person wrote down."""

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, timezone, tzinfo
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.files.numbers import numbers_of
from ingest.files.rules import Rules

NO_TIME = np.iinfo(np.int64).min
EARLIEST_US = 0                                    # 1970-01-01
LATEST_US = 7_258_118_400_000_000                  # 2200-01-01
_SANE_US = (-8_520_336_000_000_000, LATEST_US + 86_400_000_000)   # from 1700: a start may lie before 1970
COUNTED = {"days since": 86_400e6, "hours since": 3600e6, "seconds since": 1e6, "milliseconds since": 1e3,
           "microseconds since": 1.0}              # microseconds in one
TURN_BACK = ("set aside", "first", "second")

_ISO = re.compile(r"(\d{4}-\d\d-\d\d)[T ](\d\d:\d\d(?::\d\d(?:[.,]\d{1,9})?)?)\s?(Z|[+-]\d\d:?\d\d)?",
                  re.ASCII | re.IGNORECASE)
_OFFSET = re.compile(r"([+-])(\d\d):?(\d\d)", re.ASCII)


@dataclass(frozen=True, slots=True, kw_only=True)
class TimeRule:
    """Which cells hold the time (joined by one blank), how they are written, and in which zone.

    Local times that happened twice (clocks turned back) go by ``at_turn_back``; local times that never happened
    (clocks turned forward) are always set aside. Both rules look at one line only, so that the same line means
    the same instant in every file it stands in.
    """

    columns: tuple[str | int, ...]
    format: str
    since: str = ""
    zone: str = ""
    at_turn_back: str = "set aside"


@dataclass(frozen=True, slots=True)
class Times:
    """``at_us`` int64 (N,), microseconds since 1970 UTC, NO_TIME where ``why`` (N,) says what is wrong."""

    at_us: NDArray[np.int64]
    why: list[str]


def check_time(rules: Rules) -> TimeRule | None:
    """The rule of a [time] table; faults are gathered in ``rules``."""
    before = len(rules.faults)
    rule = TimeRule(columns=rules.columns("columns", "column"), format=rules.text("format", default="iso").strip(),
                    since=rules.instant_text("since"), zone=rules.text("zone", default="").strip(),
                    at_turn_back=rules.choice("at_turn_back", TURN_BACK, default="set aside"))
    rules.end()
    if rule.format not in {"iso", *COUNTED} and not _is_format(rule.format):
        rules.fault("format", rule.format, "does not give date and time",
                    f'write "iso", {", ".join(COUNTED)}, or date codes such as "%d.%m.%Y %H:%M:%S.%f"')
    if rule.zone and zone_of(rule.zone) is None:
        rules.fault("zone", rule.zone, "is no time zone",
                    'write a name such as "Europe/Berlin" or "UTC", or an offset such as "+01:00"')
    if rule.format in COUNTED:
        _check_start(rules, rule)
    elif rule.since:
        rules.fault("since", rule.since, "a start is only for counted times",
                    'leave it out, or write format = "seconds since"')
    elif rule.format != "iso" and "%z" not in rule.format and not rule.zone:
        rules.fault("zone", None, "times of this format have no zone",
                    'say where the clock stands: zone = "UTC" or "Europe/Berlin"')
    return rule if len(rules.faults) == before else None


def zone_of(name: str) -> tzinfo | None:
    """The zone of an IANA name or of an offset such as "+01:00"; None where there is no such zone."""
    if offset := _OFFSET.fullmatch(name):
        sign, hours, minutes = offset.groups()
        shift = timedelta(hours=int(hours), minutes=int(minutes))
        return timezone(-shift if sign == "-" else shift) if shift < timedelta(hours=24) else None
    try:
        return ZoneInfo(name)
    except (KeyError, ValueError, OSError):
        return None


def times_of(texts: Sequence[str], rule: TimeRule, *, decimal: str = ".") -> Times:
    """When each line was taken; ``texts`` are its time cells joined by one blank."""
    if rule.format in COUNTED:
        return _within(_counted(texts, rule, decimal))
    return _within(_written(texts, rule))


def _written(texts: Sequence[str], rule: TimeRule) -> Times:
    at_us = np.full(len(texts), NO_TIME, np.int64)
    why = [""] * len(texts)
    local_us, offset_us = _iso(texts) if rule.format == "iso" else _by_codes(texts, rule.format)
    for index in np.flatnonzero(local_us == NO_TIME):
        why[index] = f"is not a time of the form {rule.format}"
    is_absolute = (local_us != NO_TIME) & (offset_us != NO_TIME)
    at_us[is_absolute] = local_us[is_absolute] - offset_us[is_absolute]
    is_local = (local_us != NO_TIME) & (offset_us == NO_TIME)
    at_us[is_local], of_local = _placed(local_us[is_local], rule)
    for index, words in zip(np.flatnonzero(is_local), of_local, strict=True):
        why[index] = words
    return Times(at_us, why)


def _counted(texts: Sequence[str], rule: TimeRule, decimal: str) -> Times:
    count = numbers_of(texts, decimal)
    start_us = _start_us(rule)
    at_us = np.full(len(texts), NO_TIME, np.int64)
    with np.errstate(over="ignore", invalid="ignore"):
        since_us = np.round(count * COUNTED[rule.format])
        is_sound = np.isfinite(since_us) & (np.abs(since_us) < 2.0**62)
    at_us[is_sound] = start_us + since_us[is_sound].astype(np.int64)
    unit = rule.format.split()[0]
    return Times(at_us, ["" if sound else f"is not a number of {unit}" for sound in is_sound])


def _within(times: Times) -> Times:
    at_us, why = times.at_us, times.why
    is_outside = (at_us != NO_TIME) & ((at_us < EARLIEST_US) | (at_us >= LATEST_US))
    for index in np.flatnonzero(is_outside):
        why[index] = "lies before 1970 or after 2199"
    return Times(np.where(is_outside, NO_TIME, at_us), why)


def _iso(texts: Sequence[str]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    bare: list[str | None] = []
    offset_us = np.full(len(texts), NO_TIME, np.int64)
    for index, text in enumerate(texts):
        found = _ISO.fullmatch(text.strip())
        bare.append(f"{found[1]} {found[2].replace(',', '.')}" if found else None)
        if found and found[3]:
            offset_us[index] = _offset_us(found[3])
    return _microseconds(pd.to_datetime(pd.Series(bare, dtype="str"), format="ISO8601", errors="coerce")), offset_us


def _offset_us(text: str) -> int:
    if text in "Zz":
        return 0
    hours, minutes = int(text[1:3]), int(text[-2:])
    return (-1 if text[0] == "-" else 1) * (hours * 60 + minutes) * 60_000_000


def _by_codes(texts: Sequence[str], codes: str) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    has_offset = "%z" in codes
    stripped = pd.Series([text.strip() for text in texts], dtype="str")
    local_us = _microseconds(pd.to_datetime(stripped, format=codes, errors="coerce", utc=has_offset))
    return local_us, np.full(len(texts), 0 if has_offset else NO_TIME, np.int64)


def _microseconds(stamps: pd.Series) -> NDArray[np.int64]:
    index = pd.DatetimeIndex(stamps)
    bare = index.tz_localize(None) if index.tz is not None else index
    return bare.as_unit("us").asi8.copy()


def _placed(local_us: NDArray[np.int64], rule: TimeRule) -> tuple[NDArray[np.int64], list[str]]:
    """Local times placed on the axis; see TimeRule for those that happened twice or never."""
    zone = zone_of(rule.zone)
    if zone is None:
        return np.full(len(local_us), NO_TIME, np.int64), ["has no zone, and the mapping gives none"] * len(local_us)
    is_sane = (local_us >= _SANE_US[0]) & (local_us < _SANE_US[1])
    local = pd.DatetimeIndex(np.where(is_sane, local_us, 0).view("datetime64[us]"))
    first_us, second_us = (
        local.tz_localize(zone, ambiguous=np.full(len(local), is_first), nonexistent="NaT").as_unit("us").asi8
        for is_first in (True, False))
    at_us = np.where(rule.at_turn_back == "second", second_us, first_us)
    is_never, is_twice = first_us == NO_TIME, first_us != second_us
    why = [""] * len(local_us)
    for index in np.flatnonzero(is_sane & is_never):
        why[index] = f"never happened in {rule.zone}: the clocks were turned forward"
    if rule.at_turn_back == "set aside":
        at_us = np.where(is_twice, NO_TIME, at_us)
        for index in np.flatnonzero(is_sane & is_twice):
            why[index] = f"happened twice in {rule.zone}: the clocks were turned back"
    return np.where(is_sane, at_us, LATEST_US), why


def _is_format(codes: str) -> bool:
    """Whether the date codes give a whole date and an hour, and can be read back."""
    sample = datetime(2025, 2, 28, 14, 41, 28, 500_000, tzinfo=UTC)
    try:
        read = pd.to_datetime(pd.Series([sample.strftime(codes)], dtype="str"), format=codes, errors="coerce", utc=True)[0]
    except (ValueError, TypeError, UnicodeError, re.error):
        return False
    return "%" in codes and not pd.isna(read) and abs(read - sample) < pd.Timedelta(hours=1)


def _check_start(rules: Rules, rule: TimeRule) -> None:
    found = _ISO.fullmatch(rule.since) if rule.since else None
    if found is None or _start_us(rule) == NO_TIME:
        why = "a counted time needs a start" if not rule.since else "is not a start that happened once"
        if found and not found[3] and not rule.zone:
            why = "the start has no zone"
        rules.fault("since", rule.since or None, why, 'write for instance since = "2025-02-28T14:41:28.5+01:00"')


def _start_us(rule: TimeRule) -> int:
    start = TimeRule(columns=(), format="iso", zone=rule.zone, at_turn_back=rule.at_turn_back)
    return int(_written([rule.since], start).at_us[0])
