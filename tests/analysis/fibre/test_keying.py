"""Several keyed joints in series."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from analysis.fibre.jones import jones_retarder, jones_rotator
from analysis.fibre.keying import keying_er_db_averaged, keying_er_db_best, keying_er_db_worst
from analysis.reduce.axis import er_db_from_misalignment
from tests.reference.values import close, reference

few_angles = hnp.arrays(np.float64, st.integers(1, 5), elements=st.floats(-0.25, 0.25).map(lambda angle: round(angle, 9)))


def test_two_joints_of_2_degrees_averaged():
    """T01-key-01: 26.128 dB; a single joint 29.14 dB, the worst phase 23.1 dB."""
    row = reference("T01-key-01")
    angles = np.radians([row["inputs"]["theta1_deg"], row["inputs"]["theta2_deg"]])
    np.testing.assert_allclose(keying_er_db_averaged(angles), row["expected"], **close(row))
    np.testing.assert_allclose(keying_er_db_worst(angles), 23.1, atol=0.05)
    assert keying_er_db_best(angles) == np.inf


@pytest.mark.parametrize(("angles_deg", "worst", "best"), [
    ((1, 1), 29.1, np.inf), ((2, 2), 23.1, np.inf), ((3, 2), 21.2, 35.2), ((5, 5), 15.1, np.inf), ((1.5, 1.5), 25.6, np.inf),
])  # fmt: skip
def test_ends_of_a_pm_cord(angles_deg, worst, best):
    """Job paper, 2a and its table of numbers."""
    angles = np.radians(angles_deg)
    np.testing.assert_allclose([keying_er_db_worst(angles), keying_er_db_best(angles)], [worst, best], atol=0.05)


def test_against_jones_chains_of_random_phases():
    """100,000 chains of three joints: mean cross power, smallest and largest, all from fields."""
    random = np.random.default_rng(8)
    angles = np.radians([3.0, -1.5, 0.7])
    field = np.broadcast_to(np.array([1.0, 0.0], complex), (100_000, 2))
    for angle in angles:
        phases = random.uniform(0, 2 * np.pi, len(field))
        field = np.einsum("nij,nj->ni", jones_retarder(phases, 0.0) @ jones_rotator(angle), field)
    cross = np.abs(field[:, 1]) ** 2

    def er(power):
        return 10 * np.log10((1 - power) / power)

    np.testing.assert_allclose(keying_er_db_averaged(angles), er(cross.mean()), atol=0.03)
    assert keying_er_db_worst(angles) - 1e-6 <= er(cross.max()) <= keying_er_db_worst(angles) + 0.1
    assert keying_er_db_best(angles) - 0.3 <= er(cross.min()) <= keying_er_db_best(angles) + 1e-6


@given(few_angles)
def test_average_lies_between_worst_and_best(angles):
    assert keying_er_db_worst(angles) <= keying_er_db_averaged(angles) + 1e-9
    assert keying_er_db_averaged(angles) <= keying_er_db_best(angles) + 1e-6


@given(st.floats(1e-6, 0.7))
def test_one_joint_is_a_misalignment(angle):
    expected = er_db_from_misalignment(angle)
    for function in (keying_er_db_averaged, keying_er_db_worst, keying_er_db_best):
        np.testing.assert_allclose(function([angle]), expected, rtol=1e-9, atol=1e-9)


def test_limits_and_shapes():
    assert keying_er_db_averaged([0.0, 0.0]) == np.inf and keying_er_db_worst([[np.pi / 4, np.pi / 4]]).shape == (1,)
    np.testing.assert_allclose(keying_er_db_averaged([np.pi / 4, 0.1]), 0.0, atol=1e-9)
    assert np.isnan(keying_er_db_averaged([np.nan, 0.1])) and np.isnan(keying_er_db_best([np.nan, 0.1]))
