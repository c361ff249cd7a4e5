"""RFC 3339 date-times to microseconds since 1970, many at once.

Source: RFC 3339 (2002), section 5.6, read: ``date-time`` with a zone, ``T`` and ``Z`` in either case, a leap second as the
second that follows it.
"""

import re
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from ingest.store.columns import NO_TIME, IntArray
from ingest.times import SECOND_US

_TEXT = re.compile(r"(\d{4})-(\d\d)-(\d\d)[Tt](\d\d):(\d\d):(\d\d)(?:\.(\d+))?(?:[Zz]|([+-])(\d\d):(\d\d))\Z", re.ASCII)
_DAYS = np.array([0, 31, 29, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31])
_MARKS = ((4, ord("-")), (7, ord("-")), (10, ord("T")), (13, ord(":")), (16, ord(":")))
_DIGITS = (0, 1, 2, 3, 5, 6, 8, 9, 11, 12, 14, 15, 17, 18)
_FIELDS = ((0, 4), (4, 6), (6, 8), (8, 10), (10, 12), (12, 14))


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
    if not _is_date(year, month, day) or hour > 23 or minute > 59 or second > 60:
        return NO_TIME
    if sign and (int(zone_hours) > 23 or int(zone_minutes) > 59):
        return NO_TIME
    zone_s = (-1 if sign == "-" else 1) * (int(zone_hours) * 3600 + int(zone_minutes) * 60) if sign else 0
    days = int(np.datetime64(f"{year:04d}-{month:02d}-{day:02d}", "D").astype(np.int64))
    seconds = days * 86_400 + hour * 3600 + minute * 60 + second - zone_s
    return seconds * SECOND_US + int(((fraction or "") + "000000")[:6])


def _is_date(year: int, month: int, day: int) -> bool:
    if year < 1 or not 1 <= month <= 12 or not 1 <= day <= int(_DAYS[month]):
        return False
    return month != 2 or day < 29 or (year % 4 == 0 and (year % 100 != 0 or year % 400 == 0))


def _parse_even(letters: npt.NDArray[np.uint8]) -> IntArray | None:
    """Texts of one length that end in Z, shape (N, length); None where any is out of this form."""
    length = letters.shape[1]
    if (letters[:, -1] != ord("Z")).any() or any((letters[:, place] != mark).any() for place, mark in _MARKS):
        return None
    if length > 20 and (letters[:, 19] != ord(".")).any():
        return None
    places = _DIGITS + tuple(range(20, length - 1))
    digits = letters[:, places] - ord("0")
    if (digits > 9).any():
        return None
    year, month, day, hour, minute, second = (_number(digits[:, first:last]) for first, last in _FIELDS)
    if (year < 1).any() or (month < 1).any() or (month > 12).any() or (day < 1).any() or (day > _DAYS[month]).any():
        return None
    if (hour > 23).any() or (minute > 59).any() or (second > 60).any():
        return None
    months = (year - 1970).astype("M8[Y]").astype("M8[M]") + (month - 1)
    days = months.astype("M8[D]") + (day - 1)
    if (days.astype("M8[M]") != months).any():
        return None
    seconds = days.astype(np.int64) * 86_400 + hour * 3600 + minute * 60 + second
    fraction = _number(digits[:, 14:]) * 10 ** (6 - (len(places) - 14)) if len(places) > 14 else 0
    return seconds * SECOND_US + fraction


def _number(digits: npt.NDArray[np.uint8]) -> IntArray:
    """Decimal digits, shape (N, places), as one number each."""
    number = digits[:, 0].astype(np.int64)
    for place in range(1, digits.shape[1]):
        number = number * 10 + digits[:, place]
    return number
