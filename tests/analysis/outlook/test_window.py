"""Windows refuse what could only be misread."""

import numpy as np
import pytest

from analysis.outlook.window import StartReading
from tests.analysis.outlook.nights import NIGHT_S, START_US, calm, night, run_on


def test_end_is_start_and_length():
    assert calm(0).end_us == START_US + int(NIGHT_S * 1e6)


def test_one_state_and_one_mark_per_time():
    with pytest.raises(ValueError, match="one angle or one Stokes vector"):
        night(0, np.zeros((720, 2)))
    with pytest.raises(ValueError, match="one mark per time"):
        calm(0, is_trusted=np.ones(3, bool))


def test_times_rise():
    with pytest.raises(ValueError, match="drop repeats"):
        calm(0, at_us=np.zeros(720, np.int64))


@pytest.mark.parametrize("length_s", [0.0, -1.0, float("nan")])
def test_lengths_are_above_nothing(length_s):
    with pytest.raises(ValueError, match="above 0"):
        calm(0, length_s=length_s)
    with pytest.raises(ValueError, match="above 0"):
        run_on(0, length_s=length_s)


def test_a_reading_is_trusted_unless_said_otherwise():
    reading = StartReading(state=0.1)
    assert reading.is_trusted and not reading.is_at_floor and reading.open_causes == ()


@pytest.mark.parametrize("beside", ["held_s", "excess_rad"])
def test_what_stands_beside_samples_has_their_number(beside):
    with pytest.raises(ValueError, match=beside):
        night(0, np.tile([1.0, 0.0, 0.0], (720, 1)), **{beside: np.zeros(3)})


def test_angles_have_no_excess():
    with pytest.raises(ValueError, match="excess_rad"):
        night(0, np.zeros(720), excess_rad=np.zeros(720))
