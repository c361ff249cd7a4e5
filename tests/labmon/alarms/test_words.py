"""Sentences of alarms: value, limit, how far beyond, in dB and degrees."""

import pytest

from labmon.alarms.words import limit_sentence, no_reading_sentence, span_text, untrusted_sentence, value_text


def test_er_alarm_says_margin_in_db_and_degrees():
    """18.9 and 20 dB are 12.96 and 11.42 degrees from the wanted state (2 atan 10^(-ER/20))."""
    assert limit_sentence("b08/eom-in", "er_db", "alarm", 18.9, 20.0) == (
        "b08/eom-in: extinction ratio 18.9 dB is below its alarm limit 20.0 dB by 1.1 dB (1.5°)"
    )


def test_angle_is_bad_above():
    """40 and 36 degrees are 8.78 and 9.76 dB: -20 log10 tan(angle / 2)."""
    assert limit_sentence("n1/arm", "angle_deg", "warning", 40.0, 36.0) == (
        "n1/arm: angle from the wanted state 40.0° is above its warning limit 36.0° by 1.0 dB (4.0°)"
    )


def test_dop_has_no_margin_and_a_missing_value_is_said():
    assert (
        limit_sentence("n1/arm", "dop", "alarm", 0.8, 0.9)
        == "n1/arm: degree of polarization 0.800 is below its alarm limit 0.900"
    )
    assert "no value is below" in limit_sentence("n1/arm", "er_db", "alarm", None, 20.0)


@pytest.mark.parametrize(("value", "text"), [(1.25e-3, "1.25 mW"), (2e-6, "2 µW"), (-3e-9, "-3 nW"), (0.0, "0 W"), (2.0, "2 W")])
def test_power_has_a_unit_of_its_size(value, text):
    assert value_text("power_w", value) == text


@pytest.mark.parametrize(("span_s", "text"), [(4.9, "4 s"), (240, "4 min"), (6240, "1 h 44"), (183_600, "2 d 3 h"), (-5, "0 s")])
def test_spans(span_s, text):
    assert span_text(span_s) == text


def test_other_alarms():
    assert no_reading_sentence("b08/eom-in", 252) == "b08/eom-in: no reading for 4 min"
    assert (
        untrusted_sentence("b08/eom-in", ["Value frozen", "Port saturated"])
        == "b08/eom-in: reading cannot be trusted: value frozen; port saturated"
    )
