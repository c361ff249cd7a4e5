"""The course's episodes by hand are those of the pure fold, for both kinds of tap."""

import numpy as np
import pytest

from analysis.judge.fold import episodes_of, fold, start_state
from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import seconds_of
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from tests.faults.course import ANGLE_LIMIT, EPISODES, ER_LIMIT, stokes_course, two_port_course


@pytest.mark.parametrize(("kind", "unit", "course", "limit"), [("two-port", "mW", two_port_course(1), ER_LIMIT),
                                                               ("stokes", "uW", stokes_course(2), ANGLE_LIMIT)])
def test_episodes_by_hand_are_those_of_the_fold(kind, unit, course, limit):
    reduced = reduce_tap(kind, unit, course.after_us, course.columns, TapCalibration(wanted_state=[1.0, 0.0, 0.0]))
    quantity = Quantity(limit["quantity"])
    rule = LimitRule(**limit | {"quantity": quantity})
    _, events = fold(rule, start_state(), seconds_of(reduced, quantity), 0.25)
    found = [(one.raised_us, one.alarm_us, one.returned_us, one.level.value) for one in episodes_of(events)]
    np.testing.assert_array_equal([one[:3] for one in found], np.array([one[:3] for one in EPISODES]) * 1e6)
    assert [one[3] for one in found] == [one[3] for one in EPISODES]
