"""Statistics as JSON: strict, units in names."""

import json

import numpy as np
import pytest

from analysis.drift.tap_statistics import Temperature, tap_statistics
from analysis.record.statistics import PARTS
from analysis.record.statistics_facts import plain, statistics_facts
from tests.analysis.drift.test_night import stokes_night
from tests.analysis.drift.test_tap_statistics import HORIZONTAL, two_port_day


def test_what_is_not_finite_is_none_at_any_depth():
    assert plain([np.nan, np.float64(np.inf), (1.0, [np.int64(3)]), np.array([[1.0, np.nan]])]) == [
        None, None, [1.0, [3]], [[1.0, None]]]  # fmt: skip


def test_both_kinds_of_tap_are_strict_json_with_every_part():
    at_us, _, temperature, _, two_port = two_port_day()
    _, stokes = stokes_night()
    for found in (tap_statistics(two_port, temperature=Temperature(at_us, temperature)),
                  tap_statistics(stokes, wanted_state=HORIZONTAL)):  # fmt: skip
        facts = statistics_facts(found)
        assert json.loads(json.dumps(facts, allow_nan=False)) == facts and facts.keys() == set(PARTS)


def test_angles_are_in_degrees():
    _, stokes = stokes_night()
    found = tap_statistics(stokes, wanted_state=HORIZONTAL)
    facts = statistics_facts(found)
    assert facts["angle_deg"]["mean"] == pytest.approx(np.degrees(found.night.angle.mean))
    assert facts["angle_deg"]["standard_error"] == pytest.approx(np.degrees(found.angle_error.standard_error))
    assert facts["thermal_arc"]["half_arc_deg"] == pytest.approx(np.degrees(found.arc.half_arc_rad))
