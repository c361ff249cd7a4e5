"""Spans: ISO 8601 intervals, absolute times only."""

from datetime import UTC, datetime, timedelta, timezone

import pytest
from hypothesis import given
from hypothesis import strategies as st

from labmon.api.span import Span, parse_span
from labmon.api.times import parse_time, rfc3339

MARCH = datetime(2031, 3, 4, tzinfo=UTC)
FIRST, LAST = datetime(1, 1, 2, tzinfo=UTC), datetime(9999, 12, 30, tzinfo=UTC)


def between(first, last):
    steps = st.integers(0, (last - first) // timedelta(microseconds=1))
    return steps.map(lambda us: first + timedelta(microseconds=us))


moments = between(FIRST, LAST)
span_moments = between(datetime(1900, 1, 1, tzinfo=UTC), datetime(2199, 12, 31, tzinfo=UTC))


@pytest.mark.parametrize(("text", "until_at"), [
    ("2031-03-04T00:00:00Z/2031-03-05T00:00:00Z", MARCH + timedelta(days=1)),
    ("2031-03-04T00:00:00Z/P1D", MARCH + timedelta(days=1)),
    ("2031-03-04T00:00:00Z/PT36H", MARCH + timedelta(hours=36)),
    ("2031-03-04T00:00:00Z/P1DT2H3M4.5S", MARCH + timedelta(days=1, hours=2, minutes=3, seconds=4.5)),
    ("2031-03-04T00:00:00Z/PT0,5H", MARCH + timedelta(minutes=30)),
    ("2031-03-04T00:00:00Z/P2W", MARCH + timedelta(weeks=2)),
    ("2031-03-04T01:00:00+01:00/PT1S", MARCH + timedelta(seconds=1)),
    ("2031-03-04T01:00:00 01:00/PT1S", MARCH + timedelta(seconds=1)),
])
def test_intervals_of_iso_8601(text, until_at):
    """Forms of ISO 8601-1:2019, 5.5.2 (duration) and 5.5.3 (interval), from memory; the last is a + lost in an address."""
    assert parse_span(text) == Span(MARCH, until_at)


def test_years_and_months_go_by_the_calendar():
    assert parse_span("2031-01-31T12:00:00Z/P1M").until_at == datetime(2031, 2, 28, 12, tzinfo=UTC)
    assert parse_span("2028-02-29T00:00:00Z/P1Y").until_at == datetime(2029, 2, 28, tzinfo=UTC)
    assert parse_span("2031-12-04T00:00:00Z/P1Y2M3D").until_at == datetime(2033, 2, 7, tzinfo=UTC)


@pytest.mark.parametrize("text", [
    "", "/", "P1D", "P1D/2031-03-04T00:00:00Z", "now-1h/now", "2031-03-04T00:00:00Z", "2031-03-04T00:00:00/P1D",
    "2031-03-04/2031-03-05", "2031-03-04T00:00:00Z/P", "2031-03-04T00:00:00Z/PT", "2031-03-04T00:00:00Z/P1DT",
    "2031-03-04T00:00:00Z/-P1D", "2031-03-04T00:00:00Z/PT0S", "2031-03-04T00:00:00Z/2031-03-04T00:00:00Z",
    "2031-03-04T00:00:00Z/2031-03-03T00:00:00Z", "2031-03-04T00:00:00Z/P9999Y", "2031-03-04T00:00:00Z/P999999999D",
    "2031-03-04T00:00:00Z/P1D/P1D", "2031-02-30T00:00:00Z/P1D", "0001-01-01T00:00:00+02:00/P1D", "2031-03-04T00:00:00Z/1D",
    "1899-12-31T23:59:59Z/P1D", "2031-03-04T00:00:00Z/P200Y",
])
def test_what_is_no_span_says_what_to_write(text):
    with pytest.raises(ValueError, match="write "):
        parse_span(text)


@given(span_moments, span_moments)
def test_a_span_reads_back_what_it_writes(one, other):
    if one == other:
        other += timedelta(microseconds=1)
    span = Span(min(one, other), max(one, other))
    assert parse_span(str(span)) == span


almost_times = st.text("0123456789-:TZ+. ", max_size=30)
almost_durations = st.text("PYMWDTHS.,0123456789", max_size=20)


@given(st.text() | st.builds("{}/{}".format, almost_times, almost_times | almost_durations))
def test_any_text_is_a_span_or_a_value_error(text):
    try:
        span = parse_span(text)
    except ValueError:
        return
    assert span.from_us < span.until_us


@given(moments, st.integers(-23, 23))
def test_times_go_out_in_utc_with_microseconds(moment, hours):
    text = rfc3339(moment.astimezone(timezone(timedelta(hours=hours))) if 2 < moment.year < 9998 else moment)
    assert len(text) == len("2031-03-04T02:11:07.812000Z") and text.endswith("Z")
    assert parse_time(text) == moment
