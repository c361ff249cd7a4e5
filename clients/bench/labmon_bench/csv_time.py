"""The time of a line in somebody else's file."""

from __future__ import annotations

import re
from datetime import datetime, timedelta, timezone, tzinfo

from labmon_bench.clock import EARLIEST_US

_ISO = re.compile(r"(\d{4})-(\d\d)-(\d\d)[T ](\d\d):(\d\d)(?::(\d\d)(?:[.,](\d{1,9}))?)?\s*(Z|z|[+-]\d\d:?\d\d)?")
_EPOCH = datetime(1970, 1, 1, tzinfo=timezone.utc)


def line_time(text: str, form: str, zone: tzinfo | None) -> int:
    """Microseconds since 1970 of a text.

    Args:
        form: ``iso``, ``unix`` (seconds since 1970) or date codes such as ``%d.%m.%Y %H:%M:%S``.
        zone: For times without one; None for the PC's.
    Raises:
        ValueError: It is no time, not one time (the hour that clocks are turned back), or lies before 2020.
    """
    if form == "unix":
        at_us = round(float(text.replace(",", ".")) * 1e6)
    else:
        at_us = (_in_zone(_parsed(text, form), zone) - _EPOCH) // timedelta(microseconds=1)
    if at_us < EARLIEST_US:
        raise ValueError(f"{text!r} lies before 2020: its clock was not set; read such files in on the station's page")
    return at_us


def _parsed(text: str, form: str) -> datetime:
    if form != "iso":
        return datetime.strptime(text, form)  # noqa: DTZ007  the zone comes later
    match = _ISO.fullmatch(text)
    if not match:
        raise ValueError(f"{text!r} is no ISO 8601 time; write time_format with date codes, such as %d.%m.%Y %H:%M:%S")
    year, month, day, hour, minute, second = (int(part or 0) for part in match.groups()[:6])
    made = datetime(year, month, day, hour, minute, second, int((match[7] or "0").ljust(6, "0")[:6]))  # noqa: DTZ001
    return made if match[8] is None else made.replace(tzinfo=datetime.strptime(match[8].upper(), "%z").tzinfo)


def _in_zone(at: datetime, zone: tzinfo | None) -> datetime:
    if at.tzinfo is not None:
        return at
    if zone is not None:
        return at.replace(tzinfo=zone)
    first, second = at.replace(fold=0).astimezone(), at.replace(fold=1).astimezone()
    if first != second:
        raise ValueError(f"{at} happened twice or never, since the clocks were changed; let the file's writer use UTC and set "
                         "time_zone = utc, or read this hour in on the station's page")
    return first
