"""Numbers become text with unit, sign and bound."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from labmon.screen.present import (
    MISSING,
    NO_BREAK,
    age_text,
    angle_text,
    count_text,
    er_text,
    margin_db_text,
    margin_deg_text,
    number_text,
    power_text,
    time_text,
)


def plain(text: str) -> str:
    return text.replace(NO_BREAK, " ")


def test_a_bound_carries_its_sign():
    assert plain(er_text(41.23, is_lower_bound=True)) == "≥ 41.2 dB"
    assert plain(angle_text(2.1, is_upper_bound=True)) == "≤ 2.1°"
    assert plain(margin_deg_text(3.25, is_bound=True)) == "≥ +3.2°"


def test_a_margin_is_signed_with_a_real_minus():
    assert plain(margin_db_text(-0.61)) == "−0.6 dB"
    assert plain(margin_db_text(4.0)) == "+4.0 dB"
    assert plain(margin_db_text(-0.01)) == "0.0 dB"


@pytest.mark.parametrize("missing", [None, math.nan, math.inf, -math.inf])
def test_what_is_not_a_number_is_a_dash(missing):
    assert {er_text(missing), angle_text(missing), power_text(missing), margin_db_text(missing)} == {MISSING}


@pytest.mark.parametrize(
    ("power_w", "text"), [(1.02e-3, "1.02 mW"), (4.5e-8, "45.00 nW"), (0.25, "250 mW"), (-2e-6, "−2.00 µW"), (0.0, "0.00 pW")]
)
def test_power_stands_in_a_readable_step(power_w, text):
    assert plain(power_text(power_w)) == text


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0, "0 s"),
        (59.9, "59 s"),
        (60, "1 min"),
        (6240, "1 h 44"),
        (3661, "1 h 01"),
        (277_200, "3 d 5 h"),
        (-5, "0 s"),
        (None, "never"),
    ],
)
def test_an_age_has_two_units_at_most(seconds, text):
    assert plain(age_text(seconds)) == text


@given(st.floats(-1e6, 1e6))
def test_text_reads_back_as_the_rounded_number(value):
    read = float(number_text(value, 2).replace("−", "-"))
    assert abs(read - value) <= 0.0050001


def test_counts_and_times():
    from datetime import UTC, datetime, timedelta, timezone

    assert (count_text(1, "bench", "benches"), count_text(3, "bench", "benches")) == ("1 bench", "3 benches")
    assert (
        time_text(datetime(2031, 3, 4, 3, 11, 7, tzinfo=timezone(timedelta(hours=1))))
        == time_text(datetime(2031, 3, 4, 2, 11, 7, tzinfo=UTC))
        == "2031-03-04 02:11:07"
    )
