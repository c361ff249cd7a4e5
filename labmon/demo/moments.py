"""Time in the invented lab: seconds since Monday 00:00 UTC of its day 1."""

DAY_S = 86_400.0
LEDGER_DAYS = 14
_WEEK_US = 7 * 86_400 * 1_000_000
_FIRST_MONDAY_US = 4 * 86_400 * 1_000_000  # 1970-01-05


def moment(day: int, hour: int, minute: int = 0, second: float = 0.0) -> float:
    """Seconds since the start of day 1; days count from 1 as in the ledger."""
    return (day - 1) * DAY_S + hour * 3600.0 + minute * 60.0 + second


def day_one_us(now_us: int) -> int:
    """The last Monday 00:00 UTC that lies at least ``LEDGER_DAYS`` back, µs since 1970.

    The history then holds all 14 days of the ledger, and up to a week of ordinary days after them.
    """
    latest = now_us - int(LEDGER_DAYS * DAY_S) * 1_000_000
    return latest - (latest - _FIRST_MONDAY_US) % _WEEK_US
