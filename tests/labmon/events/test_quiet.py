"""Quiet hours, also over midnight and over the change of clocks."""

from datetime import UTC, datetime, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from labmon.events.quiet import quiet_until
from labmon.tell.models import QuietHours

NIGHT = QuietHours(from_minute=22 * 60, until_minute=7 * 60, zone="UTC")


def utc(*parts):
    return datetime(*parts, tzinfo=UTC)


@pytest.mark.parametrize(("at", "wanted"), [
    (utc(2031, 3, 4, 21, 59), None),
    (utc(2031, 3, 4, 22, 0), utc(2031, 3, 5, 7)),
    (utc(2031, 3, 5, 3, 0), utc(2031, 3, 5, 7)),
    (utc(2031, 3, 5, 6, 59), utc(2031, 3, 5, 7)),
    (utc(2031, 3, 5, 7, 0), None),
], ids=str)
def test_over_midnight(at, wanted):
    assert quiet_until(NIGHT, at) == wanted


def test_nobody_said_so():
    assert quiet_until(None, utc(2031, 3, 5, 3)) is None


def test_in_the_persons_own_zone_when_clocks_change():
    """Berlin goes from UTC+1 to UTC+2 in the night to 2031-03-30 (last Sunday of March, Directive 2000/84/EC, from memory)."""
    hours = QuietHours(from_minute=22 * 60, until_minute=7 * 60, zone="Europe/Berlin")
    assert quiet_until(hours, utc(2031, 3, 29, 21)) == utc(2031, 3, 30, 5)
    assert quiet_until(hours, utc(2031, 3, 28, 21)) == utc(2031, 3, 29, 6)


minutes = st.integers(0, 1439)


@given(minutes, minutes, st.integers(0, 4 * 1440))
def test_the_end_lies_ahead_within_a_day_and_is_not_quiet(first, last, after):
    hours = QuietHours(from_minute=first, until_minute=last, zone="UTC")
    at = utc(2031, 3, 4) + timedelta(minutes=after)
    until = quiet_until(hours, at)
    if until is not None:
        assert timedelta(0) < until - at <= timedelta(days=1)
        assert quiet_until(hours, until) is None and until.hour * 60 + until.minute == last
