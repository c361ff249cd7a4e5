"""A leaky splitter taken off, with the uncertainty of its own entries."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.calibration import TapCalibration
from analysis.reduce.leakage import PortNets, leak_before_splitter, without_leakage
from analysis.reduce.tap import reduce_tap
from tests.reference.values import close, reference

MATRIX = np.array([[0.98, 0.001], [0.02, 0.999]])
SIGMA = np.array([[1e-3, 2e-5], [2e-4, 1e-3]])
leaks = st.floats(1e-4, 1.0)


def nets(first, second, first_sigma=0.0, second_sigma=0.0, covariance=0.0):
    return PortNets(*(np.array([float(x)]) for x in (first, second, first_sigma, second_sigma)), covariance)


def test_readings_of_a_known_splitter():
    """T01-leak-01, -03: [[0.98, 0.001], [0.02, 0.999]] on (1, 0.002) mW, and back."""
    forward, back = reference("T01-leak-01"), reference("T01-leak-03")
    seen = np.array(forward["inputs"]["M"]) @ [forward["inputs"]["P_p"], forward["inputs"]["P_s"]]
    np.testing.assert_allclose(seen, forward["expected"], **close(forward))
    found = without_leakage(nets(*seen), back["inputs"]["M"])
    np.testing.assert_allclose([found.first[0], found.second[0]], back["expected"], **close(back))


def test_no_leakage_changes_nothing():
    given_nets = nets(1.0, 0.1, 0.01, 0.02)
    assert without_leakage(given_nets, None) is given_nets
    same = without_leakage(given_nets, np.eye(2), np.zeros((2, 2)))
    assert (same.first[0], same.second[0], same.first_sigma[0], same.second_sigma[0]) == (1.0, 0.1, 0.01, 0.02)


def test_covariance_against_a_million_draws():
    """JCGM 101: the same by drawing readings and entries; every term of the covariance, also that of the readings."""
    random = np.random.default_rng(7)
    reading_cov = np.array([[4e-6, 1e-6], [1e-6, 1e-6]])
    seen = MATRIX @ [1.0, 0.05]
    found = without_leakage(nets(*seen, 2e-3, 1e-3, 1e-6), MATRIX, SIGMA * 5)
    drawn = seen + random.multivariate_normal([0, 0], reading_cov, 400_000)
    matrices = MATRIX + 5 * SIGMA * random.standard_normal((400_000, 2, 2))
    powers = np.linalg.solve(matrices, drawn[..., None])[..., 0]
    cov = np.cov(powers.T)
    np.testing.assert_allclose([found.first_sigma[0] ** 2, found.second_sigma[0] ** 2], np.diag(cov), rtol=0.01)
    np.testing.assert_allclose(found.covariance[0], cov[0, 1], rtol=0.05)


def test_uncertain_leakage_decides_near_the_ceiling():
    """Readings known to 1e-5 say 0.02 dB at 27 dB (T01-leak-06); c = 0.0200(2) makes it 0.44 dB."""
    columns = {"port1": np.array([0.980002]), "port2": np.array([0.021998])}
    fields = {"leakage": MATRIX, "floor1": 1e-5, "floor2": 1e-5}
    exact, unsure = (
        reduce_tap("two-port", "mW", np.zeros(1, np.int64), columns, TapCalibration(**fields, leakage_sigma=sigma))
        for sigma in (None, [[0, 0], [2e-4, 0]])
    )
    np.testing.assert_allclose(exact.er_sigma_db, reference("T01-leak-06")["expected"], rtol=1e-6)
    np.testing.assert_allclose(unsure.er_sigma_db, 10 / np.log(10) * 2e-4 / 0.002, rtol=0.01)
    assert unsure.er_sigma_db > 20 * exact.er_sigma_db


def test_leakage_uncertainty_of_a_dark_port_tap():
    columns = {"port2": np.array([0.03]), "monitor": np.array([1.0])}
    cal = TapCalibration(leakage=MATRIX, leakage_sigma=[[0, 0], [2e-4, 0]], monitor_ratio=1.0)
    found = reduce_tap("dark-port", "mW", np.zeros(1, np.int64), columns, cal)
    np.testing.assert_allclose(found.er_sigma_db, 10 / np.log(10) * 2e-4 / (0.03 - 0.02), rtol=1e-6)


@given(leaks, st.floats(0.5, 1.0), st.floats(0.0, 0.05), st.floats(0.0, 0.05), st.floats(0.5, 1.0))
def test_leak_before_the_splitter_undoes_the_splitter(leak, a, b, c, d):
    matrix = [[a, b], [c, d]]
    seen1, seen2 = np.array(matrix) @ [1.0, leak]
    before, sigma = leak_before_splitter(seen2 / seen1, matrix)
    np.testing.assert_allclose(before, leak, rtol=1e-9, atol=1e-12)
    assert sigma == 0.0


def test_leak_before_the_splitter_carries_all_uncertainties():
    """Against the quotient of the two powers with their covariance, another road to the same first order."""
    seen = MATRIX @ [1.0, 0.05]
    powers = without_leakage(nets(*seen, 0.0, 1e-3), MATRIX, SIGMA)
    leak, sigma = leak_before_splitter(seen[1] / seen[0], MATRIX, 1e-3 / seen[0], SIGMA)
    first, second = powers.first[0], powers.second[0]
    relative = (powers.first_sigma[0] / first) ** 2 + (powers.second_sigma[0] / second) ** 2
    expected = second / first * np.sqrt(relative - 2 * powers.covariance[0] / (first * second))
    np.testing.assert_allclose([leak, sigma], [0.05, expected], rtol=1e-9)


def test_a_matrix_of_wrong_shape_is_refused():
    with pytest.raises(ValueError, match=r"leakage has shape \(2,\); give"):
        leak_before_splitter(0.1, [0.02, 0.01])
