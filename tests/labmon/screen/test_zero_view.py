"""Zeros, their errors and ceilings in words."""

import pytest

from analysis.reduce.ceiling import CeilingCause
from labmon.benches.ceilings import TapCeiling
from labmon.benches.zeros import DuePart
from labmon.screen.zero_view import ceiling_words, due_words, value_text


@pytest.mark.parametrize(
    ("value", "unit", "error", "said"),
    [
        (1.99896e-7, "W", 1.2e-10, "199.90 ± 0.12 nW"),
        (3.0006e-4, "mW", 1.1e-7, "300.06 ± 0.11 nW"),
        (-0.42, "uW", 0.003, "−420.0 ± 3.0 nW"),
        (2.25e-3, "V", None, "2.25 mV"),
        (17.3, "count", 0.4, "17.30 ± 0.40 count"),
        (0.0, "W", None, "0 W"),
        (None, "W", None, "–"),
    ],
)
def test_a_value_reads_well_with_the_digits_its_error_carries(value, unit, error, said):
    assert value_text(value, unit, error) == said


def test_the_ceiling_is_one_sentence_and_says_what_is_missing():
    assert ceiling_words(None) == ""
    assert "no zero and floor is entered. Take a zero." in ceiling_words(TapCeiling(None, None, ("zero", "floor")))
    full = ceiling_words(TapCeiling(44.21, CeilingCause.NOISE, ()))
    assert full.replace("\xa0", " ") == (
        "The highest extinction ratio it can honestly claim now is 44.2 dB, limited by the noise of its dark port.")
    assert ceiling_words(TapCeiling(44.21, CeilingCause.NOISE, ("error of the zero",))).endswith("so the true ceiling is lower.")


def test_what_is_made_anew_is_told_only_while_it_waits():
    assert due_words(DuePart(0, 0.0, 0.0)) == ""
    assert "24 min of readings to go" in due_words(DuePart(1, 1450.0, 5800.0)).replace("\xa0", " ")


def test_the_bar_says_how_much_is_done():
    assert (DuePart(1, 1450.0, 5800.0).percent, DuePart(2, 9000.0, 5800.0).percent, DuePart(1, 10.0, 0.0).percent) == (75, 0, 0)
