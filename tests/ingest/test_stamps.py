"""RFC 3339 date-times, many at once and one by one."""

from datetime import UTC, datetime, timedelta, timezone

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.stamps import parse_stamp, parse_stamps
from ingest.store.columns import NO_TIME
from ingest.times import YEAR_1_US, YEAR_10000_US, at_of, rfc3339_of, us_of

aware = st.datetimes(
    timezones=st.integers(-1439, 1439).map(lambda minutes: timezone(timedelta(minutes=minutes))),
    min_value=datetime(2, 1, 1),  # noqa: DTZ001  the zone is drawn
    max_value=datetime(9998, 12, 31),  # noqa: DTZ001
)
texts = st.sampled_from(
    [
        "2031-03-04T02:11:05Z",
        "2031-03-04T02:11:05.120Z",
        "2031-02-30T02:11:05.120Z",
        "2031-03-04T24:11:05.120Z",
        "2031-03-04T02:60:05.120Z",
        "2031-03-04T02:11:61.120Z",
        "2031-13-04T02:11:05.120Z",
        "0000-03-04T02:11:05.120Z",
        "2031-03-04t02:11:05.120z",
        "2031-03-04 02:11:05.120Z",
        "2031-03-04T02:11:05.12oZ",
        "2031-03-04T02:11:05,120Z",
        "2031-03-04T02:11:05.+20Z",
        "2031-03-04T02:11:05.1234567Z",
        "2032-02-29T02:11:05.120Z",
        "\u0662031-03-04T02:11:05Z",
    ]
)


@pytest.mark.parametrize(
    ("text", "us"),
    [
        ("1985-04-12T23:20:50.52Z", 482_196_050_520_000),  # RFC 3339, section 5.8
        ("1996-12-19T16:39:57-08:00", 851_042_397_000_000),  # the same as 1996-12-20T00:39:57Z, says section 5.8
        ("1990-12-31T23:59:60Z", 662_688_000_000_000),  # a leap second: the second that follows
        ("1990-12-31T15:59:60-08:00", 662_688_000_000_000),
        ("1937-01-01T12:00:27.87+00:20", -1_041_337_172_130_000),
        ("2031-03-04T02:11:05.1234569Z", 1_930_356_665_123_456),  # digits beyond the microsecond are cut off
        ("1970-01-01t00:00:00z", 0),
    ],
)
def test_examples_of_the_standard(text, us):
    """RFC 3339 (2002), section 5.8 (read); the numbers by Python's own datetime, the leap seconds by hand."""
    assert parse_stamp(text) == us and parse_stamps([text] * 7).tolist() == [us] * 7


@pytest.mark.parametrize(
    "text",
    [
        "",
        "now",
        "2031-03-04",
        "2031-03-04T02:11:05",
        "2031-03-04T02:11Z",
        "20310304T021105Z",
        "2031-W10-2T02:11:05Z",
        "2031-03-04T02:11:05+0100",
        "2031-03-04T02:11:05+24:00",
        "2031-03-04T02:11:05Z ",
        " 2031-03-04T02:11:05Z",
        "2031-03-04T02:11:05.Z",
        "2031-00-04T02:11:05Z",
        "2031-04-31T02:11:05Z",
        "2031-02-29T02:11:05Z",
    ],
)
def test_what_is_no_date_time_of_the_standard(text):
    assert parse_stamp(text) == NO_TIME and parse_stamps([text] * 9).tolist() == [NO_TIME] * 9


@given(aware)
def test_any_date_time_is_read_as_python_reads_it(at):
    assert parse_stamp(at.isoformat()) == us_of(at)


@given(st.lists(texts | aware.map(lambda at: rfc3339_of(us_of(at))), max_size=12))
def test_many_at_once_are_read_as_one_by_one(texts):
    assert parse_stamps(texts).tolist() == [parse_stamp(text) for text in texts]


@given(st.integers(YEAR_1_US, YEAR_10000_US - 1))
def test_written_times_are_read_back(us):
    assert parse_stamp(rfc3339_of(us)) == us and us_of(at_of(us)) == us and at_of(us).tzinfo is UTC
