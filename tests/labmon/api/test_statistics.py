"""Statistics of a tap's span: figures, bounds, rights, cost; a whole day comes from its stored row."""

import numpy as np
import pytest

from analysis.models import DayStatistics, DayStatisticsDue
from analysis.record import statistics
from ingest.models import TapKind
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.nightly import make_day_statistics
from tests.factories import NOON_US, make_tap
from tests.labmon.api.conftest import SECOND_US, write

IN = "/api/v1/taps/bench-a/in/statistics"
SPAN = "2031-03-04T12:00:00Z/PT2M"
DAY = "2031-03-04T00:00:00Z/P1D"
DAY_US = 86_400 * SECOND_US
TWO_NIGHTS_ON_US = NOON_US + 2 * DAY_US


@pytest.mark.parametrize(("role", "station", "status"), [
    ("manager", "bench-b", 200), ("researcher", "bench-b", 200), ("guest", "bench-a", 200), ("guest", "bench-b", 404),
    ("manager", "bench-c", 404), ("nobody", "bench-a", 401)])
def test_who_reads_which_tap(lab, role, station, status):
    assert getattr(lab, role).get(f"/api/v1/taps/{station}/in/statistics", span=SPAN).status_code == status


def test_a_steady_leak_is_told_with_its_interval_and_count(read_lab):
    said = read_lab.guest.get(IN, span=SPAN).json()
    assert said["readings"] == said["er"]["count"] == 120 and said["interval_s"] == 1.0 and said["is_complete"]
    assert said["er"]["leak_mean_db"] == pytest.approx(20.0, abs=1e-9)      # decibel: 10 log10(1e-3 W / 1e-5 W), ISO 80000-3
    assert said["er"]["leak_mean_low_db"] <= 20.0 + 1e-9 and said["er"]["leak_mean_high_db"] >= 20.0 - 1e-9
    assert said["angle_deg"]["count"] == 120 and said["drift_model"]["motion"] in {"still", "undecided"}
    assert said["temperature_from"] == "air" and said["temperature_response"]["verdict"] == "record too short"
    assert said["direction"] is None and [curve["component"] for curve in said["allan"]["curves"]] == ["angle_rad"]
    assert said["first_at"] == "2031-03-04T12:00:00.000000Z" and said["made_at"] is None


def test_stokes_taps_have_a_direction_and_three_curves(read_lab):
    said = read_lab.guest.get("/api/v1/taps/bench-a/sop/statistics", span=SPAN).json()
    wanted = np.array([0.98, 0.0, 0.1]) / np.hypot(0.98, 0.1)
    np.testing.assert_allclose(said["direction"]["state"], wanted, atol=1e-9)
    assert len(said["allan"]["curves"]) == 3 and said["displacement"]["pairs"][0] == 119


def test_a_walk_is_told_as_one(lab):
    """Azimuth and ellipticity walk by 2 mrad a second each: 2 D per coordinate and second, D = (2 · 2 mrad)²/2 on the sphere."""
    rng = np.random.default_rng(3)
    azimuth, ellipticity = np.cumsum(np.degrees(2e-4) * rng.standard_normal((2, 3000)), axis=1)
    write(lab.stokes, azimuth_deg=azimuth, ellipticity_deg=ellipticity, dop=np.ones(3000), power=np.full(3000, 1e-3))
    model = lab.guest.get("/api/v1/taps/bench-a/sop/statistics", span="2031-03-04T12:00:00Z/PT50M").json()["drift_model"]
    assert model["motion"] == "Brownian" and model["lead"] > 4.6
    assert model["diffusion_low_rad2_per_s"] <= (2 * 2e-4) ** 2 / 2 <= model["diffusion_high_rad2_per_s"]
    assert model["decorrelation_low_s"] < model["decorrelation_s"] < model["decorrelation_high_s"]


def test_a_span_without_readings_says_why_it_has_no_figures(lab):
    said = lab.manager.get(IN, span=SPAN).json()
    assert said["readings"] == 0 and said["why_none"] == "Fewer than two readings." and said["er"] is said["allan"] is None


@pytest.mark.parametrize(("query", "field"), [
    ({}, "span"), ({"span": "yesterday"}, "span"), ({"span": SPAN, "points": "3"}, "points"),
    ({"span": "2031-03-01T00:00:00Z/P9D"}, "span"), ({"span": "2031-03-01T00:00:00Z/P8DT1S"}, "span")])
def test_the_parameter_at_fault_is_named(lab, query, field):
    answer = lab.manager.get(IN, **query)
    assert answer.status_code == 400 and answer.json()["field"] == field


def test_eight_days_are_not_too_long(lab):
    assert lab.manager.get(IN, span="2031-03-01T00:00:00Z/P8D").status_code == 200


def test_too_many_readings_are_refused_before_they_are_read(read_lab, monkeypatch):
    monkeypatch.setattr(statistics, "MOST_READINGS", 100)
    answer = read_lab.manager.get(IN, span=SPAN)
    assert answer.status_code == 400 and "shorter span" in answer.json()["detail"]


def test_a_climate_tap_has_none(read_lab):
    assert read_lab.manager.get("/api/v1/taps/bench-a/air/statistics", span=SPAN).json()["field"] == "tap"


def test_a_whole_day_comes_from_its_row_and_late_readings_make_it_anew(read_lab):
    make_day_statistics(TWO_NIGHTS_ON_US)
    kept = read_lab.guest.get(IN, span=DAY).json()
    assert kept["readings"] == 120 and kept["made_at"] is not None
    fresh = statistics.span_statistics(read_lab.tap, NOON_US - DAY_US // 2, NOON_US + DAY_US // 2)
    assert {name: kept[name] for name in fresh} == fresh
    write(read_lab.tap, from_us=NOON_US + 300 * SECOND_US, boot="late", port1=np.full(30, 1e-3), port2=np.full(30, 1e-4))
    catch_up(TWO_NIGHTS_ON_US)
    assert DayStatisticsDue.objects.filter(tap=read_lab.tap).exists()
    now = read_lab.guest.get(IN, span=DAY).json()
    assert now["made_at"] is None and now["readings"] == 150
    make_day_statistics(TWO_NIGHTS_ON_US)
    assert DayStatistics.objects.get(tap=read_lab.tap, day_us=NOON_US - DAY_US // 2).readings == 150


def test_queries_do_not_grow_with_the_span_or_the_lab(read_lab, django_assert_max_num_queries):
    for _ in range(20):
        make_tap(read_lab.tap.station, kind=TapKind.CLIMATE)
    for span in (SPAN, "2031-03-01T00:00:00Z/P8D"):
        with django_assert_max_num_queries(14):
            read_lab.guest.get(IN, span=span)
    make_day_statistics(TWO_NIGHTS_ON_US)
    with django_assert_max_num_queries(7):
        assert read_lab.guest.get(IN, span=DAY).json()["made_at"]
