"""RFC 3339 date-times to microseconds since 1970, many at once.

Source: RFC 3339 (2002), section 5.6, read: ``date-time`` with a zone, ``T`` and ``Z`` in either case, a leap second as the
second that follows it.
"""

import re
from collections.abc import Sequence
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from ingest.store.columns import NO_TIME, IntArray
from ingest.times import SECOND_US

_TEXT = re.compile(r"(\d{4})-(\d\d)-(\d\d)[Tt](\d\d):(\d\d):(\d\d)(?:\.(\d+))?(?:[Zz]|([+-])(\d\d):(\d\d))\Z", re.ASCII)
_DAYS = np.array([0, 31, 29, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31])
_FIELDS = ((0, 4), (4, 6), (6, 8), (8, 10), (10, 12), (12, 14))
_LOWEST = np.array([1, 1, 1, 0, 0, 0, 0])
_HIGHEST = np.array([9999, 12, 31, 23, 59, 60, 999_999])
_MICROSECONDS = np.array([3_600e6, 60e6, 1e6, 1.0])


def parse_stamps(texts: Sequence[str]) -> IntArray:
    """Microseconds since 1970 UTC of each text, shape (N,), NO_TIME where it is no RFC 3339 date-time.

    Digits beyond the microsecond are cut off.
    """
    if not texts:
        return np.empty(0, np.int64)
    length = len(texts[0])
    if len(texts) > 4 and 20 <= length <= 27 and length != 21:
        joined = "".join(texts)
        if joined.isascii() and len(joined) == length * len(texts) and set(map(len, texts)) == {length}:
            found = _parse_even(np.frombuffer(joined.encode(), np.uint8).reshape(-1, length))
            if found is not None:
                return found
    return np.array([parse_stamp(text) for text in texts], np.int64)


def parse_stamp(text: str) -> int:
    """Microseconds since 1970 UTC, NO_TIME where ``text`` is no RFC 3339 date-time of the years 1 to 9999."""
    match = _TEXT.match(text)
    if match is None:
        return NO_TIME
    *numbers, fraction, sign, zone_hours, zone_minutes = match.groups()
    year, month, day, hour, minute, second = map(int, numbers)
    days = _days(year, month, day)
    if days is None or hour > 23 or minute > 59 or second > 60:
        return NO_TIME
    if sign and (int(zone_hours) > 23 or int(zone_minutes) > 59):
        return NO_TIME
    zone_s = (-1 if sign == "-" else 1) * (int(zone_hours) * 3600 + int(zone_minutes) * 60) if sign else 0
    seconds = days * 86_400 + hour * 3600 + minute * 60 + second - zone_s
    return seconds * SECOND_US + int(((fraction or "") + "000000")[:6])


def _is_date(year: int, month: int, day: int) -> bool:
    if year < 1 or not 1 <= month <= 12 or not 1 <= day <= int(_DAYS[month]):
        return False
    return month != 2 or day < 29 or (year % 4 == 0 and (year % 100 != 0 or year % 400 == 0))


def _parse_even(letters: npt.NDArray[np.uint8]) -> IntArray | None:
    """Texts of one length that end in Z, shape (N, length); None where any is out of this form."""
    length = letters.shape[1]
    form, places, weights, mask = _form_of(length)
    digits = letters - form
    if (digits > mask).any():
        return None
    fields = digits[:, places].astype(np.float64) @ weights
    if (fields < _LOWEST).any() or (fields > _HIGHEST).any():
        return None
    if (fields[:, :3] == fields[0, :3]).all():
        days: Any = _days(*map(int, fields[0, :3].tolist()))
        if days is None:
            return None
    else:
        counted = [_days(*date) for date in fields[:, :3].astype(np.int64).tolist()]
        if None in counted:
            return None
        days = np.array(counted, np.int64)
    return (fields[:, 3:] @ _MICROSECONDS).astype(np.int64) + days * (86_400 * SECOND_US)


@lru_cache(maxsize=16)
def _form_of(length: int) -> tuple[Any, Any, Any, Any]:
    """For texts like ``2031-03-04T02:11:05.120Z`` of this length: what to take off each letter and the greatest rest that is
    allowed, the places of digits, and the weights that make year, month, day, hour, minute, second and microsecond of them."""
    shape = "0000-00-00T00:00:00." + "0" * (length - 21) + "Z" if length > 20 else "0000-00-00T00:00:00Z"
    form = np.frombuffer(shape.encode(), np.uint8)
    places = np.flatnonzero(form == ord("0"))
    weights = np.zeros((len(places), 7))
    for number, (first, last) in enumerate((*_FIELDS, (14, len(places)))):
        for place in range(first, last):
            weights[place, number] = 10.0 ** ((last if number < 6 else first + 6) - 1 - place)
    return form, places, weights, np.where(form == ord("0"), 9, 0).astype(np.uint8)


@lru_cache(maxsize=4096)
def _days(year: int, month: int, day: int) -> int | None:
    """Days since 1970, None where there is no such date."""
    return int(np.datetime64(f"{year:04d}-{month:02d}-{day:02d}", "D").astype(np.int64)) if _is_date(year, month, day) else None
