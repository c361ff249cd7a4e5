"""Both namings of circular light and both signs of time."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.fibre.handedness import Handedness, ellipticity_rad_in, mueller_in, stokes_in, with_other_time_sign
from analysis.fibre.jones import jones_retarder, jones_state, stokes_of_jones
from analysis.fibre.mueller import mueller_retarder
from analysis.reduce.calibration import IEEE, OPTICS
from tests.strategies import unit_sops

angles_rad = st.floats(-3.0, 3.0)


def test_names_are_those_of_the_calibration():
    assert (Handedness.OPTICS, Handedness.IEEE) == (OPTICS, IEEE)


def test_right_handed_light_turns_clockwise_for_a_viewer_who_faces_the_source():
    """Definition: real field of S3 = +1, exp(+i wt); the beam comes along z at the viewer, who has x right and y up."""
    phase = np.linspace(0, 1.0, 50)
    field = (jones_state(0.0, np.pi / 4)[None, :] * np.exp(1j * phase)[:, None]).real
    angle_facing_the_source = np.unwrap(np.arctan2(field[:, 1], field[:, 0]))
    assert (np.diff(angle_facing_the_source) < 0).all()  # clockwise


@given(unit_sops())
def test_naming_changes_s3_alone_and_back(sop):
    stokes = np.array([1.0, *sop])
    other = stokes_in(Handedness.IEEE, stokes, given=Handedness.OPTICS)
    np.testing.assert_array_equal(other, stokes * [1, 1, 1, -1])
    np.testing.assert_array_equal(stokes_in(Handedness.OPTICS, other, given=Handedness.IEEE), stokes)
    np.testing.assert_array_equal(stokes_in(Handedness.IEEE, sop, given=Handedness.IEEE), sop)
    assert ellipticity_rad_in(Handedness.IEEE, 0.2, given=Handedness.OPTICS) == -0.2


@given(angles_rad, angles_rad, unit_sops())
def test_an_element_acts_alike_in_both_namings(retardance, azimuth, sop):
    """Renaming, passing the renamed element and renaming back is passing the element."""
    mueller, stokes = mueller_retarder(retardance, azimuth), np.array([1.0, *sop])
    renamed = mueller_in(Handedness.IEEE, mueller, given=Handedness.OPTICS)
    behind = renamed @ stokes_in(Handedness.IEEE, stokes, given=Handedness.OPTICS)
    np.testing.assert_allclose(stokes_in(Handedness.OPTICS, behind, given=Handedness.IEEE), mueller @ stokes, atol=1e-12)


@given(angles_rad, angles_rad, angles_rad, st.floats(-0.78, 0.78))
def test_time_sign_conjugates_fields_and_elements_together(retardance, azimuth, psi, chi):
    field, element = jones_state(psi, chi), jones_retarder(retardance, azimuth)
    np.testing.assert_allclose(with_other_time_sign(element) @ with_other_time_sign(field), np.conj(element @ field), atol=1e-12)
    flipped = stokes_of_jones(with_other_time_sign(field))
    np.testing.assert_allclose(flipped, stokes_of_jones(field) * [1, 1, 1, -1], atol=1e-12)  # if read with the wrong sign


def test_wrong_shapes_are_refused():
    with pytest.raises(ValueError, match="stokes has shape"):
        stokes_in(Handedness.IEEE, [1.0, 2.0], given=Handedness.OPTICS)
    with pytest.raises(ValueError, match="mueller has shape"):
        mueller_in(Handedness.IEEE, np.eye(3), given=Handedness.OPTICS)
