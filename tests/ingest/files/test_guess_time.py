import pytest

from ingest.files.guess_time import guess_time


@pytest.mark.parametrize(("rows", "places", "format"), [
    ([["1", "2031-03-04 12:00:00"], ["2", "2031-03-04 12:00:01"]], (1,), "iso"),
    ([["04.03.2031 12:00:00"], ["04.03.2031 12:00:01"]], (0,), "%d.%m.%Y %H:%M:%S"),
    ([["03/04/2031 01:00 PM".replace("01:00", "01:00:00")]], (0,), "%d/%m/%Y %I:%M:%S %p"),
    ([["04.03.31", "12:00:00"]], (0, 1), "%d.%m.%y %H:%M:%S"),
    ([["03/25/2031 12:00:00"]], (0,), "%m/%d/%Y %H:%M:%S"),
])
def test_written_times(rows, places, format):  # noqa: A002
    guess = guess_time(rows, [], ".")
    assert (guess.places, guess.format) == (places, format)


def test_zones_are_seen_only_where_every_time_has_one():
    assert guess_time([["2031-03-04T12:00:00Z"]], [], ".").has_zone
    assert not guess_time([["2031-03-04T12:00:00Z"], ["2031-03-04T12:00:01"]], [], ".").has_zone


def test_a_counted_time_goes_by_its_name_and_rises():
    assert guess_time([["0"], ["100"]], ["time_ms"], ".").format == "milliseconds since"
    assert guess_time([["0"], ["0.1"]], ["t_s"], ".").interval_s == 0.1
    assert guess_time([["1"], ["0"]], ["t_s"], ".") is None
    assert guess_time([["20.1"], ["20.2"]], ["temperature"], ".") is None
