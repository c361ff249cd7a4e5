"""Quiet hours: when someone is not to be called. Pure."""

from datetime import datetime, time, timedelta
from zoneinfo import ZoneInfo

from labmon.tell.models import QuietHours

DAY_MINUTES = 1440


def quiet_until(hours: QuietHours | None, at: datetime) -> datetime | None:
    """When the quiet time that ``at`` lies in is over; None where it lies in none."""
    if hours is None:
        return None
    zone = ZoneInfo(hours.zone)
    local = at.astimezone(zone)
    minute = local.hour * 60 + local.minute
    length = (hours.until_minute - hours.from_minute) % DAY_MINUTES
    if (minute - hours.from_minute) % DAY_MINUTES >= length:
        return None
    end = time(hours.until_minute // 60, hours.until_minute % 60)
    day = local.date() + timedelta(days=1 if hours.until_minute <= minute else 0)
    return datetime.combine(day, end, zone).astimezone(at.tzinfo)
