"""Times and spans on the way out: absolute, with a zone, never guessed."""

from datetime import timedelta
from typing import Any

import pandas as pd

HOW = "write '2031-03-04T18:00:00Z/PT14H', or give two times with a zone: (start, end) or (start, timedelta)"


def time_text(time: Any) -> str:
    """A time as RFC 3339 in UTC.

    Args:
        time: Text with a zone, or an aware datetime or Timestamp.
    Raises:
        ValueError: It is no time, or has no zone.
    """
    try:
        moment = pd.Timestamp(time)
    except (ValueError, TypeError):
        raise ValueError(f"{time!r} is no time; write for example '2031-03-04T18:00:00Z'.") from None
    if moment is pd.NaT:
        raise ValueError(f"{time!r} is no time; write for example '2031-03-04T18:00:00Z'.")
    if moment.tzinfo is None:
        raise ValueError(f"{time!r} has no zone, so it could be two different moments; end it with Z, or use "
                         "pd.Timestamp(…, tz='Europe/Berlin').")
    return moment.tz_convert("UTC").strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def span_text(span: Any) -> str:
    """A span as the ISO 8601 interval that the API takes.

    Args:
        span: Text ``start/end`` or ``start/duration``, or a pair of times, or a time and a timedelta.
    Raises:
        ValueError: It is none of these, has no length, or a time has no zone.
    """
    if isinstance(span, str):
        if span.count("/") != 1:
            raise ValueError(f"span={span!r} is no interval; {HOW}.")
        return span
    try:
        start, end = span
    except (TypeError, ValueError):
        raise ValueError(f"span={span!r} is no interval; {HOW}.") from None
    start_text = time_text(start)
    end_text = time_text(pd.Timestamp(start) + end if isinstance(end, timedelta) else end)
    if not start_text < end_text:
        raise ValueError(f"span={span!r} has no length; the end lies behind the start. Change the two.")
    return f"{start_text}/{end_text}"


def tap_parts(tap: str) -> dict[str, str]:
    """``station/tap`` as the two places of an address.

    Raises:
        ValueError: It is no such name.
    """
    station, stroke, name = str(tap).partition("/")
    if not (station and stroke and name) or "/" in name:
        raise ValueError(f"tap={tap!r}; write station/tap as in lab.taps(), such as 'bench-a/in'.")
    return {"station": station, "tap": name}


