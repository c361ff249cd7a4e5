"""The span of a call: an ISO 8601 interval ``start/end`` or ``start/duration``, absolute times only."""

import calendar
import re
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta

from ingest.times import us_of
from labmon.api.times import parse_time, rfc3339

_NUMBER = r"[0-9]{1,9}(?:[.,][0-9]{1,9})?"
_DURATION = re.compile(
    rf"P(?=[0-9T])(?:(?P<years>[0-9]{{1,4}})Y)?(?:(?P<months>[0-9]{{1,5}})M)?(?:(?P<weeks>{_NUMBER})W)?"
    rf"(?:(?P<days>{_NUMBER})D)?"
    rf"(?:T(?=[0-9])(?:(?P<hours>{_NUMBER})H)?(?:(?P<minutes>{_NUMBER})M)?(?:(?P<seconds>{_NUMBER})S)?)?")
#: No reading of an optical bench lies outside; buckets that begin before the span still have a date.
FIRST_YEAR, LAST_YEAR = 1900, 2199
_HOW = "write start/end or start/duration, such as 2031-03-04T00:00:00Z/P1D"


@dataclass(frozen=True, slots=True)
class Span:
    """From ``from_at`` up to, not including, ``until_at`` (aware, UTC)."""

    from_at: datetime
    until_at: datetime

    @property
    def from_us(self) -> int:
        """Start, microseconds since 1970 UTC."""
        return us_of(self.from_at)

    @property
    def until_us(self) -> int:
        """End, microseconds since 1970 UTC."""
        return us_of(self.until_at)

    def __str__(self) -> str:
        return f"{rfc3339(self.from_at)}/{rfc3339(self.until_at)}"


def parse_span(text: str) -> Span:
    """The span a caller wrote.

    Raises:
        ValueError: It cannot be used; the message says why and what to write.
    """
    parts = text.split("/")
    if len(parts) != 2:
        raise ValueError(f"{text[:80]!r} is no interval; {_HOW}")
    from_at = parse_time(parts[0])
    until_at = add_duration(from_at, parts[1]) if parts[1].strip()[:1].upper() == "P" else parse_time(parts[1])
    if not from_at < until_at:
        raise ValueError(f"the interval {text[:80]!r} has no length; {_HOW}")
    if from_at.year < FIRST_YEAR or until_at > datetime(LAST_YEAR + 1, 1, 1, tzinfo=UTC):
        raise ValueError(f"the interval {text[:80]!r} leaves the years {FIRST_YEAR} to {LAST_YEAR}; {_HOW}")
    return Span(from_at, until_at)


def add_duration(start: datetime, text: str) -> datetime:
    """``start`` plus an ISO 8601 duration; years and months by the calendar, the last day of a short month.

    Raises:
        ValueError: The duration cannot be read, or leads past the year 9999.
    """
    found = _DURATION.fullmatch(text.strip().upper())
    if found is None:
        raise ValueError(f"{text[:60]!r} is no duration; write for example P1D, PT6H or PT90S")
    given = {unit: amount for unit, amount in found.groupdict().items() if amount is not None}
    months = 12 * int(given.pop("years", "0")) + int(given.pop("months", "0"))
    exact = {unit: float(amount.replace(",", ".")) for unit, amount in given.items()}
    try:
        return _months_later(start, months) + timedelta(**exact)
    except (OverflowError, ValueError):
        raise ValueError(f"{text[:60]!r} leads past the year 9999; write a shorter duration") from None


def _months_later(start: datetime, months: int) -> datetime:
    year, month0 = divmod(start.year * 12 + start.month - 1 + months, 12)
    if year > 9999:
        raise OverflowError(year)
    day = min(start.day, calendar.monthrange(year, month0 + 1)[1])
    return start.replace(year=year, month=month0 + 1, day=day)
