"""A station's sentence and its taps' values in words."""

from datetime import UTC, datetime, timedelta

import pytest

from ingest.models import StationBoot
from labmon.benches.queries import StationFacts, TapFacts
from labmon.benches.show import NowSample, ShownMargin
from labmon.screen.station_view import boot_words, clock_words, station_sentence, tap_view

NOW = datetime(2031, 3, 4, 2, 23, tzinfo=UTC)


def sample(**fields) -> NowSample:
    usual = {
        "taken_at": NOW,
        "age_s": 1.0,
        "er_db": 19.4,
        "er_sigma_db": 0.08,
        "is_lower_bound": False,
        "is_upper_bound": False,
        "angle_deg": 12.2,
        "angle_is_upper_bound": False,
        "angle_is_lower_bound": False,
        "polarized_er_db": None,
        "dop": None,
        "power_w": 1.02e-3,
        "azimuth_deg": None,
        "ellipticity_deg": None,
        "sop": None,
        "temperature_c": 21.43,
        "humidity_pct": None,
        "pressure_hpa": None,
        "trust": "trusted",
        "trust_reasons": [],
        "trust_by_quantity": {},
        "last_trusted": {},
    }
    return NowSample(**(usual | fields))


def tap(name="eom-in", state="below limit", margin=(-0.6, -0.8), now=None, **fields) -> TapFacts:
    shown = None if margin is None else ShownMargin(1, "er_db", 19.4, 20.0, 23.0, *margin, False)
    usual = {
        "id": 7,
        "name": name,
        "kind": "two-port",
        "unit": "uW",
        "interval_s": 1.0,
        "now": now or sample(),
        "limits": [],
        "margins": [],
        "margin": shown,
        "state": state,
        "last_heard_at": NOW - timedelta(seconds=2),
        "silent_s": 2.0,
        "is_silent": False,
        "calibration": None,
        "unknown_columns": [],
        "has_stokes": False,
    }
    return TapFacts(**(usual | fields))


def facts(*taps) -> StationFacts:
    return StationFacts(None, "North Hall", None, None, "", list(taps), [], [], NOW, 0)


@pytest.mark.parametrize(
    ("one", "sentence"),
    [
        (tap(), "n2/eom-in is 0.8° (0.6 dB) below its limit."),
        (tap(state="in spec", margin=(3.2, 2.1)), "n2/eom-in is 2.1° (3.2 dB) inside its limit."),
        (tap(state="thin", margin=(1.0, 0.9)), "n2/eom-in is thin: 0.9° (1.0 dB) to its limit."),
        (tap(state="no reading", silent_s=6240), "n2/eom-in has sent no reading for 1 h 44."),
        (tap(state="untrusted", now=sample(trust_reasons=["Saturated"])), "n2/eom-in cannot be trusted now: saturated."),
        (tap(state="undecided", margin=None), "n2/eom-in is at the detector's floor, cannot tell."),
        (tap(state="no limit", margin=None), "n2/eom-in sends readings and has no limit."),
        (tap(state="never heard", margin=None), "n2/eom-in has not been heard yet."),
    ],
)
def test_the_station_in_one_sentence(one, sentence):
    assert station_sentence("n2", facts(one), 0).replace("\xa0", " ") == sentence


def test_the_worst_tap_speaks_and_waiting_alarms_are_said():
    calm = tap("other", "in spec", (9.0, 7.0))
    said = station_sentence("n2", facts(calm, tap()), 2)
    assert said.startswith("n2/eom-in is")
    assert said.endswith("2 alarms wait for someone.")
    assert station_sentence("n2", facts(), 0) == "n2 has no tap yet."


def values(one: TapFacts) -> dict[str, str]:
    return {fact.name: ("~" if fact.is_doubtful else "") + fact.text.replace("\xa0", " ") for fact in tap_view(one, NOW).values}


def test_values_stand_with_error_and_both_margins():
    assert values(tap()) == {
        "Extinction ratio": "19.4 dB ± 0.08",
        "Angle from wanted": "12.2°",
        "Power": "1.02 mW",
        "Margin": "−0.8° (−0.6 dB)",
        "Temperature": "21.43 °C",
    }


def test_an_untrusted_value_is_missing_and_its_last_trusted_one_stands_beside():
    last = {"er_db": {"value": 26.0, "at": "2031-03-04T02:00:00Z"}}
    shown = values(tap(now=sample(er_db=None, er_sigma_db=None, last_trusted=last)))
    assert shown["Extinction ratio"] == "–"
    assert shown["Last trusted extinction ratio"] == "~26.0 dB at 2031-03-04 02:00:00"


def test_doubt_and_bounds_are_marked():
    shown = values(
        tap(
            now=sample(
                er_db=41.2,
                er_sigma_db=None,
                is_lower_bound=True,
                angle_deg=1.0,
                angle_is_upper_bound=True,
                trust_by_quantity={"power_w": {"trust": "doubtful"}},
            )
        )
    )
    assert (shown["Extinction ratio"], shown["Angle from wanted"], shown["Power"]) == ("≥ 41.2 dB", "≤ 1.0°", "~1.02 mW")


def test_old_values_are_hollow():
    assert all(text.startswith("~") for name, text in values(tap(is_silent=True)).items() if name != "Temperature")


def test_the_tap_has_its_own_rail():
    view = tap_view(tap(), NOW)
    assert "#mark-below" in view.rail
    assert tap_view(tap(state="no limit", margin=None), NOW).rail == ""
    assert view.unit == "µW"


def test_clocks_in_words():
    heard = {"first_arrival_us": 0, "last_arrival_us": 60_000_000}
    faulty = StationBoot(boot="7f3a", firmware="board 1.4", clock_fault="The clock is 7 min ahead.", **heard)
    assert (
        boot_words(faulty)
        == "Boot 7f3a, firmware board 1.4: heard 1970-01-01 00:00:00 to 1970-01-01 00:01:00 UTC. The clock is 7 min ahead."
    )
    assert clock_words([faulty]) == ["The clock is 7 min ahead."]
    good = StationBoot(boot="", clock_offset_us=-120_000, **heard)
    assert boot_words(good).replace("\xa0", " ").endswith("differ by −0.12 s.")
    assert clock_words([good, faulty]) == []


def test_doubt_is_said_with_its_reason():
    doubtful = sample(trust="doubtful", trust_reasons=["Clock unset: timed by the server"])
    assert tap_view(tap(now=doubtful), NOW).doubt == "doubtful: clock unset: timed by the server"
    assert tap_view(tap(), NOW).doubt == ""
