"""Times as files write them. Changes of the clock: tz database, Europe/Berlin 2025-03-30 and 2025-10-26, 01:00 UTC."""

from datetime import UTC, datetime, timedelta

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.files.times import EARLIEST_US, LATEST_US, NO_TIME, TimeRule, times_of, zone_of

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


def instant(text: str) -> int:
    return (datetime.fromisoformat(text) - EPOCH) // timedelta(microseconds=1)


def rule(codes: str = "iso", **more: str) -> TimeRule:
    return TimeRule(columns=("t",), format=codes, **more)


@pytest.mark.parametrize(("text", "same"), [
    ("2025-02-28T14:41:28.50", "2025-02-28T14:41:28.500+00:00"),
    ("2025-02-28 14:41:28,5", "2025-02-28T14:41:28.500+00:00"),
    ("2024-12-31 23:08:47.646793+00:00", "2024-12-31T23:08:47.646793+00:00"),
    ("2025-02-28T14:41:28+0530", "2025-02-28T09:11:28+00:00"),
    ("2025-02-28T14:41Z", "2025-02-28T14:41:00+00:00"),
])
def test_iso(text, same):
    assert times_of([text], rule(zone="UTC")).at_us[0] == instant(same)


@pytest.mark.parametrize(("text", "codes", "same"), [
    ("28.02.2025 14:41:28,50", "%d.%m.%Y %H:%M:%S,%f", "2025-02-28T13:41:28.5+00:00"),
    ("02/28/25 02:41 PM", "%m/%d/%y %I:%M %p", "2025-02-28T13:41:00+00:00"),
    ("28.07.2025 14:41:28,50", "%d.%m.%Y %H:%M:%S,%f", "2025-07-28T12:41:28.5+00:00"),
])
def test_date_codes_in_a_zone(text, codes, same):
    assert times_of([text], rule(codes, zone="Europe/Berlin")).at_us[0] == instant(same)


def test_codes_with_their_own_offset_need_no_zone():
    assert times_of(["2025-02-28 14:41:28 +0100"], rule("%Y-%m-%d %H:%M:%S %z")).at_us[0] == instant("2025-02-28T13:41:28+00:00")


@pytest.mark.parametrize(("text", "codes", "since", "same"), [
    ("0.091", "seconds since", "2025-02-28T14:41:28.5+01:00", "2025-02-28T13:41:28.591+00:00"),
    ("91", "milliseconds since", "2025-02-28T14:41:28.5", "2025-02-28T13:41:28.591+00:00"),
    ("45716.5", "days since", "1899-12-30T00:00:00Z", "2025-02-28T12:00:00+00:00"),   # a common spreadsheet day number
    ("-1", "hours since", "2025-02-28T12:00:00Z", "2025-02-28T11:00:00+00:00"),
])
def test_counted_times(text, codes, since, same):
    assert times_of([text], rule(codes, since=since, zone="Europe/Berlin")).at_us[0] == instant(same)


def test_counted_times_take_the_decimal_comma():
    times = times_of(["0,5"], rule("seconds since", since="2025-01-01T00:00Z"), decimal=",")
    assert times.at_us[0] == instant("2025-01-01T00:00:00.5+00:00")


def test_an_hour_that_happened_twice():
    """02:30 local on 26 October 2025: first at 00:30 UTC (summer time), again at 01:30 UTC."""
    text = ["2025-10-26 02:30:00"]
    aside = times_of(text, rule(zone="Europe/Berlin"))
    assert aside.at_us[0] == NO_TIME and "twice" in aside.why[0]
    assert times_of(text, rule(zone="Europe/Berlin", at_turn_back="first")).at_us[0] == instant("2025-10-26T00:30:00+00:00")
    assert times_of(text, rule(zone="Europe/Berlin", at_turn_back="second")).at_us[0] == instant("2025-10-26T01:30:00+00:00")


@pytest.mark.parametrize("at_turn_back", ["set aside", "first", "second"])
def test_an_hour_that_never_happened(at_turn_back):
    times = times_of(["2025-03-30 02:30:00", "2025-03-30 03:30:00"], rule(zone="Europe/Berlin", at_turn_back=at_turn_back))
    assert times.at_us[0] == NO_TIME and "never happened" in times.why[0]
    assert times.at_us[1] == instant("2025-03-30T01:30:00+00:00")


@pytest.mark.parametrize(("text", "why"), [
    ("", "not a time"), ("12:00", "not a time"), ("2025", "not a time"), ("2025-02-30 00:00", "not a time"),
    ("1969-12-31 23:59:59", "before 1970"), ("2200-01-01 00:00:00", "after 2199"), ("2025-01-01 24:00:01", "not a time"),
    ("0001-01-01 00:00:00", "before 1970"), ("9999-12-31 23:59:59", "after 2199"),
])
def test_what_is_no_time_says_so(text, why):
    times = times_of([text], rule(zone="UTC"))
    assert times.at_us[0] == NO_TIME and why in times.why[0]


def test_iso_without_zone_anywhere():
    times = times_of(["2025-01-01 00:00:00"], rule())
    assert times.at_us[0] == NO_TIME and "no zone" in times.why[0]


def test_offsets_are_zones():
    assert times_of(["2025-01-01 01:00:00"], rule(zone="+01:00")).at_us[0] == instant("2025-01-01T00:00:00+00:00")
    assert zone_of("Nowhere/City") is None and zone_of("../etc/passwd") is None and zone_of("+99:00") is None


@settings(deadline=None)
@given(st.lists(st.text(max_size=30), max_size=5), st.sampled_from(
    ["iso", "seconds since", "days since", "%d.%m.%Y %H:%M:%S", "%Y-%m-%d %H:%M:%S.%f%z"]))
def test_any_text_is_a_time_or_has_a_reason(texts, codes):
    times = times_of(texts, rule(codes, zone="Europe/Berlin", since="2025-01-01T00:00:00Z"))
    for at_us, why in zip(times.at_us, times.why, strict=True):
        assert bool(why) == (at_us == NO_TIME)
        assert at_us == NO_TIME or EARLIEST_US <= at_us < LATEST_US


@settings(deadline=None)
@given(st.timedeltas(timedelta(days=365), timedelta(days=80_000)))
def test_times_agree_with_the_standard_library(since_epoch):
    moment, at_us = (EPOCH + since_epoch).replace(tzinfo=None), since_epoch // timedelta(microseconds=1)
    assert times_of([moment.isoformat(" ", "microseconds")], rule(zone="UTC")).at_us[0] == at_us
    assert times_of([moment.strftime("%d/%m/%Y %H:%M:%S.%f")], rule("%d/%m/%Y %H:%M:%S.%f", zone="UTC")).at_us[0] == at_us
