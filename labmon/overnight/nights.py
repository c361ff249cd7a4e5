"""Which hours are a night: local time from one clock hour to another of the next day, whatever the clocks do in between."""

from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from zoneinfo import ZoneInfo

from ingest.times import us_of


@dataclass(frozen=True, slots=True)
class Hours:
    """From ``begins`` to ``ends`` of the following morning, local time."""

    begins: time = time(18)
    ends: time = time(8)


#: Of every lab, for now: a night is what lies between two working days.
HOURS = Hours()


@dataclass(frozen=True, slots=True)
class Night:
    """The night that begins on a local date; half-open, UTC."""

    date: date
    from_at: datetime
    until_at: datetime

    @property
    def from_us(self) -> int:
        """Start, µs since 1970 UTC."""
        return us_of(self.from_at)

    @property
    def until_us(self) -> int:
        """End, µs since 1970 UTC."""
        return us_of(self.until_at)


def night_of(day: date, zone: ZoneInfo, hours: Hours) -> Night:
    """The night from ``day`` to the next; an hour longer or shorter where the clocks change in it."""
    begins = datetime.combine(day, hours.begins, zone).astimezone(UTC)
    return Night(day, begins, datetime.combine(day + timedelta(days=1), hours.ends, zone).astimezone(UTC))


def last_night(now: datetime, zone: ZoneInfo, hours: Hours) -> Night:
    """The newest night that is over."""
    today = now.astimezone(zone).date()
    return next(night for back in range(4) if (night := night_of(today - timedelta(days=back), zone, hours)).until_at <= now)
