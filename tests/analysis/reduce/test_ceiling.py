"""The highest ER that can be claimed."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.ceiling import (
    CeilingCause,
    dop_needed,
    er_ceiling_db_from_dop,
    er_ceiling_db_from_leakage,
    er_ceiling_db_from_leakage_error,
    er_ceiling_db_from_noise,
    er_ceiling_db_from_step,
    er_ceiling_db_from_zero,
    joint_er_ceiling,
)
from analysis.reduce.two_port import TwoPortMeasurement, er_by_draws, er_to_first_order
from tests.reference.values import close, reference

MATRIX, SIGMA = [[0.98, 0.001], [0.02, 0.999]], [[1e-3, 1e-5], [2e-4, 1e-3]]


@pytest.mark.parametrize(("bright", "zero_error", "expected_db"), [(1e-3, 1e-9, 60.0), (1e-5, 1e-9, 40.0), (1e-3, -1e-6, 30.0)])
def test_false_light_of_1_nw_limits_1_mw_to_60_db(bright, zero_error, expected_db):
    """Job paper, section 3."""
    np.testing.assert_allclose(er_ceiling_db_from_zero(bright, zero_error), expected_db)


def test_one_step_of_12_bits_is_36_db():
    """Job paper, section 2b."""
    np.testing.assert_allclose(er_ceiling_db_from_step(2.0**12, 1.0), 36.1, atol=0.03)


def test_leaky_splitter():
    """T01-leak-05: 16.90 dB in one orientation, 29.996 dB with the ports exchanged; 0.1, 0.5, 1, 5 % as in the job paper."""
    row = reference("T01-leak-05")
    np.testing.assert_allclose(er_ceiling_db_from_leakage(MATRIX), row["expected"], **close(row))
    np.testing.assert_allclose(er_ceiling_db_from_leakage(MATRIX, wanted_port=2), 29.9957, atol=5e-5)
    seen = [er_ceiling_db_from_leakage([[1.0, 0.0], [share, 1.0]]) for share in (0.001, 0.005, 0.01, 0.05)]
    np.testing.assert_allclose(seen, [30, 23, 20, 13], atol=0.05)
    assert er_ceiling_db_from_leakage(np.eye(2)) == np.inf


def test_noise_ceiling_is_the_bound_of_a_net_of_nothing():
    """Job paper: 1 mW over 0 with 1 nW noise says at least 57.1 dB."""
    np.testing.assert_allclose(er_ceiling_db_from_noise(1e-3, 1e-9), 57.08, atol=0.005)
    found = er_to_first_order(TwoPortMeasurement(reading1=1.0, reading2=0.0, reading2_sigma=1e-3), confidence=0.9)
    np.testing.assert_allclose(er_ceiling_db_from_noise(1.0, 1e-3, confidence=0.9), found.er_db, rtol=1e-12)


@pytest.mark.parametrize("port", [1, 2])
def test_joint_ceiling_is_what_the_reduction_says_of_perfect_light(port):
    """The ceiling and the reducer must not disagree: light without leak, read through the splitter, by both roads."""
    light = [2.0, 0.0] if port == 1 else [0.0, 2.0]
    seen = np.array(MATRIX) @ light
    dark = {"reading2_sigma": 3e-4, "zero2_sigma": 4e-4} if port == 1 else {"reading1_sigma": 3e-4, "zero1_sigma": 4e-4}
    splitter = {"leakage": MATRIX, "leakage_sigma": SIGMA, "wanted_port": port}
    measurement = TwoPortMeasurement(reading1=seen[0], reading2=seen[1], **splitter, **dark)
    joint = joint_er_ceiling(2.0, zero_sigma=4e-4, noise_sigma=3e-4, **splitter)
    np.testing.assert_allclose(joint.er_db, er_to_first_order(measurement).er_db, atol=0.1)
    np.testing.assert_allclose(joint.er_db, er_by_draws(measurement, np.random.default_rng(6), draws=200_000).er_db, atol=0.1)


def test_leakage_left_in_adds_in_full():
    joint = joint_er_ceiling(1.0, noise_sigma=1e-3, leakage=MATRIX, leakage_sigma=SIGMA, is_leakage_taken_off=False)
    np.testing.assert_allclose(10 ** (-joint.er_db / 10), 0.02 / 0.98 + 1.959964e-3, rtol=1e-5)
    assert joint.worst is CeilingCause.LEAKAGE
    np.testing.assert_allclose(joint.by_cause_db[CeilingCause.LEAKAGE], er_ceiling_db_from_leakage(MATRIX))


def test_leakage_error_alone():
    """c = 0.0200(2) behind d = 0.999: 1.96 x 2.002e-4 is 34.06 dB."""
    np.testing.assert_allclose(er_ceiling_db_from_leakage_error(MATRIX, [[0, 0], [2e-4, 0]]), 34.06, atol=0.01)


@given(st.floats(1e-6, 1e-2), st.floats(1e-6, 1e-2), st.floats(1e-6, 1e-2))
def test_joint_ceiling_is_below_each_cause(zero, noise, step):
    joint = joint_er_ceiling(1.0, zero_sigma=zero, noise_sigma=noise, step=step, leakage=MATRIX, leakage_sigma=SIGMA)
    assert joint.er_db <= min(joint.by_cause_db.values()) + 1e-9
    assert joint.by_cause_db[joint.worst] == min(joint.by_cause_db.values())


def test_nothing_limits():
    assert joint_er_ceiling(1.0).er_db == np.inf


@pytest.mark.parametrize(("dop", "expected_db"), [(0.98, 19.956), (0.99, 23.0), (0.999, 33.0), (0.0, 0.0)])
def test_dop_caps_the_port_er(dop, expected_db):
    """Job paper, 2a; methods: 19.96 dB at 0.98."""
    np.testing.assert_allclose(er_ceiling_db_from_dop(dop), expected_db, atol=0.02)


def test_dop_out_of_range():
    assert er_ceiling_db_from_dop(1.0) == np.inf and np.isnan(er_ceiling_db_from_dop([1.01, -0.1, np.nan])).all()


@given(st.floats(0.0, 60.0))
def test_dop_needed_is_the_inverse(er_db):
    np.testing.assert_allclose(er_ceiling_db_from_dop(dop_needed(er_db)), er_db, rtol=1e-6, atol=1e-9)


@pytest.mark.parametrize(("call", "word"), [
    (lambda: er_ceiling_db_from_zero(0.0, 1.0), "bright"), (lambda: joint_er_ceiling(1.0, step=-1.0), "step"),
    (lambda: er_ceiling_db_from_leakage([[1.0]]), "leakage"),
    (lambda: er_ceiling_db_from_leakage(MATRIX, wanted_port=0), "wanted_port"),
])  # fmt: skip
def test_impossible_inputs_are_refused(call, word):
    with pytest.raises(ValueError, match=word):
        call()
