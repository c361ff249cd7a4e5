"""Times at the API's door: RFC 3339 with microseconds, always UTC on the way out."""

import re
from datetime import UTC, datetime

import numpy as np
from numpy.typing import NDArray

from ingest.times import at_of

_PLUS_LOST = re.compile(r"(T[0-9:.,]+) ([0-9]{2}:?[0-9]{2})\Z")


def parse_time(text: str) -> datetime:
    """An absolute time, in UTC.

    A ``+`` of a zone that an address turned into a space is taken as meant.

    Raises:
        ValueError: The text is no RFC 3339 time or has no zone; the message says what to write.
    """
    wanted = "write a time with its zone, such as 2031-03-04T02:11:05.120Z"
    try:
        time = datetime.fromisoformat(_PLUS_LOST.sub(r"\1+\2", text.strip()))
    except ValueError:
        raise ValueError(f"{text[:60]!r} is no time; {wanted}") from None
    if time.tzinfo is None:
        raise ValueError(f"{text[:60]!r} has no zone; {wanted}")
    try:
        return time.astimezone(UTC)
    except OverflowError:
        raise ValueError(f"{text[:60]!r} lies outside the years 1 to 9999; {wanted}") from None


def rfc3339(time: datetime | int | None) -> str | None:
    """A time (or microseconds since 1970) as text; None stays None."""
    if time is None:
        return None
    moment = at_of(time) if isinstance(time, int) else time.astimezone(UTC)
    return moment.strftime("%Y-%m-%dT%H:%M:%S.%f").rjust(26, "0") + "Z"


def rfc3339_many(at_us: NDArray[np.int64]) -> NDArray[np.str_]:
    """Microseconds since 1970, shape (N,), as text, shape (N,)."""
    return np.datetime_as_string(at_us.astype("datetime64[us]"), unit="us", timezone="UTC")
