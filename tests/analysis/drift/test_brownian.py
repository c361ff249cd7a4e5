"""What an isotropic random walk predicts."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift import brownian
from analysis.drift.displacement import CEILING_RAD2
from tests.analysis.drift.walks import START, walk
from tests.reference.values import close, reference, references


@pytest.mark.parametrize("row", references("T05-bm-"), ids=lambda row: row["id"])
def test_cosine_and_squared_angle(row):
    """Perrin (1928), Roberts & Ursell (1960), from memory; the values were checked by finite volumes and simulation."""
    x = row["inputs"]["D"], row["inputs"]["t"]
    np.testing.assert_allclose(brownian.mean_cosine(*x), row["expected"]["E_cos"], **close(row))
    np.testing.assert_allclose(brownian.mean_square_angle_rad2(*x), row["expected"]["E_angle2"], **close(row))


@pytest.mark.parametrize("row", references("T05-acf-step-"), ids=lambda row: row["id"])
def test_one_step_of_the_stokes_vector(row):
    """C. B. Czegledi et al., Sci. Rep. 6, 21217 (2016): the model; its correlation derived."""
    np.testing.assert_allclose(brownian.stokes_step_correlation(row["inputs"]["sigma_p2"]), row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T05-acf-jones-"), ids=lambda row: row["id"])
def test_one_step_of_the_field(row):
    np.testing.assert_allclose(brownian.field_step_correlation(row["inputs"]["sigma_p2"]), row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T05-acf-lag-"), ids=lambda row: row["id"])
def test_linewidth_to_correlation(row):
    """Steps to the power of the lag; the limit of short steps is exp(-8 π Δp t), the same as exp(-2 D t) with D = 4 π Δp."""
    x = row["inputs"]
    np.testing.assert_allclose(brownian.stokes_step_correlation(2 * np.pi * x["dp_Hz"] * x["T_s"]) ** x["lag"],
                               row["expected"], **close(row))
    limit = brownian.mean_cosine(brownian.diffusion_from_linewidth(x["dp_Hz"]), x["T_s"] * x["lag"])
    np.testing.assert_allclose(limit, np.exp(-8 * np.pi * x["dp_Hz"] * x["T_s"] * x["lag"]), rtol=1e-12)


def test_power_in_the_orthogonal_state():
    row = reference("T05-er-diffusion")
    np.testing.assert_allclose(brownian.orthogonal_share(row["inputs"]["D"], row["inputs"]["t"]), row["expected"], **close(row))


@given(st.floats(1e-15, 1e3))
def test_names_of_the_rate_are_inverse_and_consistent(diffusion):
    linewidth = brownian.linewidth_from_diffusion(diffusion)
    np.testing.assert_allclose(brownian.diffusion_from_linewidth(linewidth), diffusion, rtol=1e-12)
    time_s = brownian.decorrelation_time_s(diffusion)
    np.testing.assert_allclose(time_s, 1.0 / (8.0 * np.pi * linewidth), rtol=1e-12)
    np.testing.assert_allclose(brownian.mean_cosine(diffusion, time_s), np.exp(-1.0), rtol=1e-9)


@given(st.floats(0.0, 20.0), st.floats(0.0, 20.0))
def test_squared_angle_rises_to_its_ceiling_below_the_plane(one, other):
    low, high = sorted((one, other))
    near, far = brownian.mean_square_angle_rad2(1.0, np.array([low, high]))
    assert near <= far + 1e-9 <= CEILING_RAD2 + 2e-9 and near <= 4.0 * low + 1e-12


def test_short_and_long_times_join():
    found = brownian.mean_square_angle_rad2(1.0, np.array([0.0, 0.002 * (1 - 1e-9), 0.002, 50.0]))
    np.testing.assert_allclose(found[1], found[2], rtol=1e-7)
    assert found[0] == 0.0 and brownian.decorrelation_time_s(0.0) == np.inf
    np.testing.assert_allclose(found[3], CEILING_RAD2, rtol=1e-9)
    with pytest.raises(ValueError, match="negative"):
        brownian.mean_cosine(-1.0, 1.0)


def test_simulated_walk_agrees():
    """Our own walk of the demo, 20 000 starts' worth of end points."""
    rng = np.random.default_rng(3)
    ends = np.array([walk(20, 0.01, rng)[-1] @ START for _ in range(3000)])
    np.testing.assert_allclose(ends.mean(), brownian.mean_cosine(0.01, 20.0), atol=0.02)
