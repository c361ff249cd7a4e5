"""Between aware datetimes and whole microseconds since 1970 (the inside form of all data times)."""

from datetime import UTC, datetime, timedelta

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
SECOND_US = 1_000_000
DAY_US = 86_400 * SECOND_US
_MICROSECOND = timedelta(microseconds=1)


def us_of(at: datetime) -> int:
    """Microseconds since 1970 UTC of an aware datetime, exact."""
    return (at - EPOCH) // _MICROSECOND


def datetime_of(at_us: int) -> datetime:
    """Aware UTC datetime of microseconds since 1970, exact."""
    return EPOCH + timedelta(microseconds=int(at_us))
