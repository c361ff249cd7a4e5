"""Times as integers: microseconds since 1970 UTC, and their RFC 3339 text."""

import time
from datetime import UTC, datetime, timedelta

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
MICROSECOND = timedelta(microseconds=1)
SECOND_US = 1_000_000
YEAR_1_US = -62_135_596_800 * SECOND_US
YEAR_10000_US = 253_402_300_800 * SECOND_US


def now_us() -> int:
    """The server's clock, us."""
    return time.time_ns() // 1000


def us_of(at: datetime) -> int:
    """Microseconds since 1970 of an aware datetime."""
    return (at - EPOCH) // MICROSECOND


def at_of(us: int) -> datetime:
    """The aware UTC datetime; ``us`` within the years 1 to 9999."""
    return EPOCH + us * MICROSECOND


def rfc3339_of(us: int) -> str:
    """RFC 3339 in UTC with microseconds, as in ``2031-03-04T02:11:07.500000Z``."""
    return at_of(int(us)).isoformat(timespec="microseconds").replace("+00:00", "Z")
