"""A span's statistics from the store: what it counts, where temperatures come from."""

import numpy as np
import pytest

from analysis.record.statistics import is_whole_day, span_statistics, stored_count
from ingest.models import TapKind
from tests.factories import NOON_US, make_station, make_tap, store_readings

pytestmark = pytest.mark.django_db
S = 1_000_000
COUNT = 7200


def send(tap, **columns):
    store_readings(tap, NOON_US + np.arange(COUNT) * S, **columns)


def test_temperatures_are_the_taps_own_else_those_of_the_stations_climate_tap():
    """The leak is set to follow the air: both ways find the same arc, and its worst is the crest a + h (F-77)."""
    station = make_station()
    air = 21.0 + np.sin(2 * np.pi * np.arange(COUNT) / 1440.0)
    fraction = 0.010 + 0.006 * np.cos(3.0 * (air - 21.0))
    ports = {"port1": 1e-3 * (1.0 - fraction), "port2": 1e-3 * fraction}
    own, other = make_tap(station, "own"), make_tap(station, "other")
    send(own, temperature_c=air, **ports)
    send(other, **ports)
    send(make_tap(station, "room", kind=TapKind.CLIMATE), temperature_c=air)
    worst_db = 10.0 * np.log10((1.0 - 0.016) / 0.016)
    for tap, source in ((own, "own"), (other, "room")):
        facts = span_statistics(tap, NOON_US, NOON_US + COUNT * S)
        assert facts["temperature_from"] == source
        assert facts["thermal_arc"]["verdict"] == "measured"
        assert facts["thermal_arc"]["worst_er_db"] == pytest.approx(worst_db, abs=0.02)
        assert facts["thermal_arc"]["kappa_rad_per_k"] == pytest.approx(3.0, rel=0.01)


def test_without_any_temperature_nothing_is_said_of_it():
    tap = make_tap()
    send(tap, port1=1e-3, port2=1e-5)
    facts = span_statistics(tap, NOON_US, NOON_US + COUNT * S)
    assert facts["temperature_response"] is facts["thermal_arc"] is facts["temperature_from"] is None


def test_readings_of_a_span_are_counted_from_what_is_stored():
    tap = make_tap()
    send(tap, port1=1e-3, port2=1e-5)
    assert stored_count(tap.pk, NOON_US, NOON_US + COUNT * S) == COUNT
    assert stored_count(tap.pk, NOON_US - 100 * S, NOON_US) == 0


def test_a_whole_day_begins_at_midnight_utc():
    day_us = 86_400 * S
    assert is_whole_day(NOON_US - day_us // 2, NOON_US + day_us // 2)
    assert not is_whole_day(NOON_US, NOON_US + day_us)
    assert not is_whole_day(NOON_US - day_us // 2, NOON_US)
