"""Partly polarized light."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.fibre.coherency import (
    coherency_behind,
    coherency_of_stokes,
    jones_of_stokes,
    split_polarized,
    stokes_of_coherency,
)
from analysis.fibre.jones import jones_retarder, stokes_of_jones
from analysis.fibre.mueller import mueller_of_jones
from tests.strategies import unit_sops


@given(unit_sops(), st.floats(0.0, 1.0), st.floats(1e-9, 1.0))
def test_there_and_back(sop, dop, power):
    stokes = power * np.array([1.0, *(dop * sop)])
    np.testing.assert_allclose(stokes_of_coherency(coherency_of_stokes(stokes)), stokes, rtol=1e-12, atol=1e-15 * power)
    polarized, rest = split_polarized(stokes)
    np.testing.assert_allclose(stokes_of_jones(jones_of_stokes(stokes)), polarized, atol=1e-12 * power)
    np.testing.assert_allclose(rest, power * (1 - dop), atol=1e-12 * power)


@given(unit_sops(), st.floats(0.0, 1.0), st.floats(-3, 3), st.floats(-3, 3))
def test_jones_and_mueller_agree_for_any_dop(sop, dop, retardance, azimuth):
    stokes, element = np.array([1.0, *(dop * sop)]), jones_retarder(retardance, azimuth)
    behind = stokes_of_coherency(coherency_behind(element, coherency_of_stokes(stokes)))
    np.testing.assert_allclose(behind, mueller_of_jones(element) @ stokes, atol=1e-12)


def test_pure_states_have_a_coherency_of_rank_one():
    """Eigenvalues (1 +- DOP)/2 of the power."""
    values = np.linalg.eigvalsh(coherency_of_stokes(np.array([[1, 0.6, 0, 0.8], [1, 0.3, 0, 0.4], [1, 0, 0, 0]])))
    np.testing.assert_allclose(values, [[0, 1], [0.25, 0.75], [0.5, 0.5]], atol=1e-12)


@pytest.mark.parametrize("stokes", [[1, -1, 0, 0], [1, -1 + 1e-12, 1.4e-6, 0], [1, 0, 0, -1], [0, 0, 0, 0]])
def test_edges_of_the_field(stokes):
    field = jones_of_stokes(np.array(stokes, float))
    np.testing.assert_allclose(stokes_of_jones(field)[1:], stokes[1:], atol=1e-12)
    assert field[0].imag == 0.0 and field[0].real >= 0.0


def test_against_py_pol():
    """py_pol 1.3: the Jones vector of the polarized part, up to its phase."""
    light = pytest.importorskip("py_pol.stokes").Stokes("light")
    light.general_azimuth_ellipticity(azimuth=0.4, ellipticity=0.2, intensity=2.0, degree_pol=0.7)
    pure = pytest.importorskip("py_pol.jones_vector").Jones_vector("pure")
    pure.general_azimuth_ellipticity(azimuth=0.4, ellipticity=0.2, intensity=1.4)
    field, other = jones_of_stokes(np.asarray(light.M, float).ravel()), np.asarray(pure.M, complex).ravel()
    np.testing.assert_allclose(np.abs(np.vdot(field, other)), 1.4, rtol=1e-9)
    np.testing.assert_allclose(np.linalg.norm(field) ** 2, 1.4, rtol=1e-9)


def test_nan_stays_nan():
    assert np.isnan(jones_of_stokes(np.array([1.0, np.nan, 0.0, 0.0]))).any()
    assert np.isnan(coherency_of_stokes(np.full(4, np.nan))).all()
