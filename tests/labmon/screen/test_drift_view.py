"""A tap's day in words: each verdict has its sentence, each figure its doubt."""

import copy
import re
from datetime import UTC, datetime

import numpy as np
import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from analysis.drift.tap_statistics import Temperature, tap_statistics
from analysis.models import DayStatistics
from analysis.record.statistics_facts import statistics_facts
from labmon.people.models import Role
from labmon.screen.drift_view import drift_view
from tests.analysis.drift.test_night import stokes_night
from tests.analysis.drift.test_tap_statistics import HORIZONTAL, two_port_day
from tests.factories import NOON_US, make_person, make_station, make_tap

DAY = datetime(2031, 3, 4, tzinfo=UTC)
DAY_US = 86_400_000_000
COMMON = {"why_none": "", "is_complete": True, "temperature_from": "air", "readings": 5}


def facts_of(found) -> dict:
    return COMMON | statistics_facts(found)


@pytest.fixture(scope="module")
def two_port():
    at_us, _, temperature, worst_db, reduced = two_port_day()
    return facts_of(tap_statistics(reduced, temperature=Temperature(at_us, temperature))), worst_db


@pytest.fixture(scope="module")
def stokes():
    return facts_of(tap_statistics(stokes_night()[1], wanted_state=HORIZONTAL))


def words(facts) -> tuple[str, dict[str, str]]:
    view = drift_view(7, "in", DAY, facts)
    return view.sentence.replace("\xa0", " "), {fact.name: fact.text.replace("\xa0", " ") for fact in view.facts}


def changed(facts, part, **members):
    other = copy.deepcopy(facts)
    other[part] |= members
    return other


def test_a_walk_says_how_far_it_goes_and_when_it_forgets(stokes):
    """D = 2e-7 rad²/s: √(4 D t) of an hour is 3.07°, 1/(2 D) is 28.9 days (F-60); both lie in their bands."""
    sentence, facts = words(stokes)
    assert sentence.startswith("On 2031-03-04 (UTC) it wandered at random, by ") and sentence.endswith(" in an hour.")
    low, high = (float(end.split("°")[0]) for end in facts["Random wander in an hour"].split("(")[1].split(" to "))
    assert low <= np.degrees(np.sqrt(4 * 2e-7 * 3600)) <= high
    assert facts["Kind of motion"].startswith("Brownian, ") and " to 1 against" in facts["Kind of motion"]
    assert " d " in facts["Forgets its state within"]
    assert facts["With temperature"] == "no temperature known"


def test_two_ports_tell_the_worst_er_with_its_band(two_port):
    facts, worst_db = two_port
    _, said = words(facts)
    value, low, high = map(float, re.findall(r"[0-9.]+(?= dB)", said["Worst ER of the thermal arc"]))
    assert low - 0.1 <= worst_db <= high + 0.1 and low <= value <= high
    assert "from 1,440 readings worth " in said["ER of the mean leak"] and "in the angle" in said["Spread"]
    assert facts["drift_model"]["motion"] == "cyclic" and not any("hour" in name for name in said)
    assert said["With temperature"].startswith("turns the fibre's phase, see the thermal arc")
    assert "Forgets its state within" not in said
    assert drift_view(7, "in", DAY, facts).is_angle_only


@pytest.mark.parametrize(("members", "sentence"), [
    ({"motion": "still"}, "it stood still, as far as reading noise lets see."),
    ({"motion": "bounded", "relaxation_s": 1500.0}, "it strayed about one place and came back within about 25 min."),
    ({"motion": "cyclic", "period_s": 1440.0, "amplitude_deg": 1.25}, "it swung once in 24 min, by 1.2° to either side."),
    ({"motion": "undecided", "reason": "fewer than 48 steps"}, "it cannot be told how it moved: fewer than 48 steps."),
])  # fmt: skip
def test_every_kind_of_motion_has_its_sentence(stokes, members, sentence):
    assert words(changed(stokes, "drift_model", **members))[0] == f"On 2031-03-04 (UTC) {sentence}"


def test_verdicts_that_say_no_stand_as_words(two_port):
    facts, _ = two_port
    short = changed(facts, "thermal_arc", verdict="arc too short")
    short["temperature_response"] |= {"verdict": "no relation shown"}
    short["drift_model"] |= {"motion": "undecided", "reason": ""}
    _, said = words(short)
    assert "In an hour, were it a random walk" in said
    assert said["Worst ER of the thermal arc"] == "arc too short"
    assert said["With temperature"] == "no relation shown (temperatures of air)" and said["Kind of motion"] == "undecided"


def test_a_relation_to_temperature_has_error_and_lag(two_port):
    shown = changed(two_port[0], "temperature_response", verdict="relation shown", angle_deg_per_k=-0.421, standard_error=0.05,
                    lag_s=720.0, lag_low_s=480.0, lag_high_s=960.0)
    assert words(shown)[1]["With temperature"] == "−0.42° ± 0.05° per K, 12 min behind (8 min to 16 min) (temperatures of air)"


def test_an_open_end_is_said_so(stokes):
    open_end = changed(stokes, "drift_model", decorrelation_high_s=None, diffusion_low_rad2_per_s=0.0)
    _, said = words(open_end)
    assert said["Forgets its state within"].endswith("to no end shown)") and "(0.000°" in said["Random wander in an hour"]


def test_no_figures_are_told_with_their_reason():
    assert drift_view(7, "in", None, None).sentence.startswith("No whole day (UTC) of readings is over yet.")
    none = {"why_none": "Fewer than two readings.", "is_complete": True}
    assert drift_view(7, "in", DAY, none).sentence == "No figures of 2031-03-04 (UTC). Fewer than two readings."


def test_missing_readings_are_told(stokes):
    assert words(stokes | {"is_complete": False})[0].endswith("Some raw readings of that day are missing.")


@pytest.mark.django_db
def test_the_page_has_a_section_a_tap_at_one_query_however_many_taps_and_days(client, stokes, two_port):
    client.force_login(make_person(Role.RESEARCHER))
    station = make_station("n2")

    def queries() -> int:
        with CaptureQueriesContext(connection) as captured:
            page = client.get("/stations/n2/").content.decode()
        assert page.count("<summary>How ") == station.taps.count()
        assert sum("analysis_daystatistics" in query["sql"] for query in captured.captured_queries) == 1
        return len(captured)

    def grow(count: int, facts: dict) -> None:
        for _ in range(count):
            tap = make_tap(station)
            DayStatistics.objects.bulk_create([
                DayStatistics(tap=tap, day_us=(NOON_US // DAY_US - day) * DAY_US, readings=5, facts=facts) for day in range(30)])

    grow(2, stokes)
    queries()
    few = queries()
    grow(10, two_port[0])
    assert queries() == few
    assert "it wandered at random" in client.get("/stations/n2/").content.decode()
