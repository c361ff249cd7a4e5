"""A joining bench in words: what is seen, what is missing, and why."""

from datetime import UTC, datetime, timedelta
from types import SimpleNamespace
from typing import Any

import pytest

from analysis.reduce.plausible import Oddity
from ingest.models import StationBoot
from labmon.benches.joining import Joining, KeyFacts, TapJoining
from labmon.benches.models import DoorRefusal
from labmon.screen.joining_view import Tick, joining_view

NOW = datetime(2031, 3, 4, 2, 23, tzinfo=UTC)
LIGHT = SimpleNamespace(er_db=27.34, is_lower_bound=False, dop=None, trust_reasons=[], temperature_c=21.4)


def key(hint: str = "x7fQ", used_s: float | None = None) -> KeyFacts:
    return KeyFacts(hint, NOW, None if used_s is None else NOW - timedelta(seconds=used_s), "192.0.2.7" if used_s else "")


def tap(**fields: Any) -> TapJoining:
    usual = {"name": "eom-in", "kind": "two-port", "unit": "uW", "heard_at": None, "columns": [], "unknown_columns": [],
             "oddities": {}, "now": None, "aside": None}
    return TapJoining(**(usual | fields))


def refusal(title: str, **fields: Any) -> DoorRefusal:
    usual = {"status": 401, "detail": "Do it so.", "hint": "abcd", "remote_address": "192.0.2.9", "count": 12,
             "last_at": NOW - timedelta(seconds=8), "field": ""}
    return DoorRefusal(title=title, **(usual | fields))


def joining(**fields: Any) -> Joining:
    usual = {"station": SimpleNamespace(name="b08"), "keys": [key()], "boot": None, "taps": [tap()], "refused": [],
             "strangers": [], "now": NOW}
    return Joining(**(usual | fields))


def boot(**fields: Any) -> StationBoot:
    return StationBoot(boot="7f3a", first_arrival_us=0, last_arrival_us=0, **fields)


def step(view, name: str):
    (found,) = [one for one in view.steps if one.name == name]
    return found.tick, " ".join(found.words).replace("\xa0", " ")


def heard(**fields: Any) -> TapJoining:
    return tap(**({"heard_at": NOW - timedelta(seconds=1), "columns": ["port1", "port2"], "now": LIGHT} | fields))


def test_before_anything_came_every_box_is_empty():
    view = joining_view(joining())
    assert view.sentence == "b08 has not been heard yet."
    assert {one.tick for one in view.steps} == {Tick.WAITS}
    assert [one.name for one in view.steps] == ["Key seen", "Clock", "Tap eom-in", "Unit of eom-in", "First light of eom-in"]


def test_a_bench_that_has_joined_says_its_first_light():
    view = joining_view(joining(keys=[key(used_s=4)], boot=boot(clock_offset_us=40_000), taps=[heard()]))
    assert view.is_joined
    assert view.sentence.replace("\xa0", " ") == "b08 has joined: first light, eom-in extinction ratio 27.3 dB."


def test_a_wrong_key_is_told_with_its_address_and_age():
    tick, words = step(joining_view(joining(strangers=[refusal("the key is not known")])), "Key seen")
    assert tick is Tick.FAULT
    assert "does not know (it begins with abcd) was tried 12 times from 192.0.2.9, 8 s ago" in words
    assert "begins with x7fQ" in words


@pytest.mark.parametrize(
    ("row", "said"),
    [
        (refusal("the key is not known", hint="pers"), "A person's key was tried"),
        (refusal("a station key is needed", hint="", count=1), "came without a key, once from 192.0.2.9"),
        (refusal("the broker turned it away", hint=""), "The MQTT broker turned someone away 12 times from 192.0.2.9"),
    ],
)
def test_other_wrong_keys_are_named_for_what_they_are(row, said):
    assert said in step(joining_view(joining(strangers=[row])), "Key seen")[1]


def test_a_revoked_key_of_this_bench_is_told_until_the_new_one_is_used():
    row = refusal("the key was revoked")
    assert step(joining_view(joining(keys=[key(used_s=60)], refused=[row])), "Key seen")[0] is Tick.FAULT
    assert step(joining_view(joining(keys=[key(used_s=1)], refused=[row])), "Key seen")[0] is Tick.DONE


def test_a_clock_that_is_off_is_told_by_how_much():
    tick, words = step(joining_view(joining(boot=boot(clock_offset_us=7_500_000))), "Clock")
    assert tick is Tick.FAULT and "7.5 s behind the server's" in words


def test_a_tap_that_is_not_there_is_told_with_those_that_are():
    row = refusal("station 'b08' has no tap 'eom_in'", status=400, field="taps.eom_in")
    tick, words = step(joining_view(joining(keys=[key(used_s=4)], refused=[row])), "Tap eom-in")
    assert tick is Tick.FAULT
    assert "station 'b08' has no tap 'eom_in'. This bench has eom-in." in words


def test_an_unknown_column_is_named():
    assert "not used: ch_a" in step(joining_view(joining(taps=[heard(unknown_columns=["ch_a"])])), "Tap eom-in")[1]


@pytest.mark.parametrize(
    ("oddity", "value", "said"),
    [
        (Oddity.TOO_STRONG, 1e9, "port1: 1e+09 µW is more than any fibre here carries"),
        (Oddity.NEGATIVE, -3.0, "port1: -3 µW is negative"),
        (Oddity.CONSTANT, 998.0, "port1: 998 µW does not change at all"),
    ],
)
def test_an_improbable_unit_is_explained(oddity, value, said):
    tick, words = step(joining_view(joining(taps=[heard(oddities={"port1": (oddity, value)})])), "Unit of eom-in")
    assert tick is Tick.FAULT and said in words


def test_readings_without_light_say_why():
    dark = SimpleNamespace(er_db=None, dop=None, is_lower_bound=False, trust_reasons=["Both ports are dark."], temperature_c=None)
    assert step(joining_view(joining(taps=[heard(now=dark)])), "First light of eom-in")[1] == (
        "Readings come, and tell no polarization yet: Both ports are dark.")
