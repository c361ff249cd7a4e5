"""An exchange of the ports: R to 1/R with the sum kept, from one reading to the next (JOB's stage 1)."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.exchanged import exchange_at


def ports(er_db, *, at=60, count=120, turning=0, loss=1.0, seed=1, noise_db=0.05):
    """Power in both ports: cos² and sin² of half the angle on the sphere, exchanged at ``at`` over ``turning`` readings."""
    rng = np.random.default_rng(seed)
    leak = 10.0 ** (-np.broadcast_to(er_db, count) / 10.0)
    share = leak / (1.0 + leak)
    turned = np.clip((np.arange(count) - at + 1) / (turning + 1), 0.0, 1.0)
    share = np.sin(np.arcsin(np.sqrt(share)) * (1 - turned) + np.arccos(np.sqrt(share)) * turned) ** 2
    power = 1e-3 * (1 + 1e-3 * rng.normal(size=count)) * np.where(np.arange(count) >= at, loss, 1.0)
    flicker = 10.0 ** (noise_db * rng.normal(size=count) / 10.0)
    return power * (1 - share), power * share * flicker


@given(st.floats(6.0, 35.0), st.integers(10, 110), st.integers(0, 50))
def test_an_exchange_in_one_step_is_found_where_it_is(er_db, at, seed):
    assert exchange_at(*ports(er_db, at=at, seed=seed)) == at


def test_a_zero_or_negative_net_among_them_does_not_hide_it():
    first, second = ports(20.0)
    second[10] = -1e-9
    assert exchange_at(first, second) == 60


@pytest.mark.parametrize("case", [
    {"turning": 3}, {"loss": 0.9}, {"at": 118}, {"er_db": 1.0}, {"at": 120},
])
def test_what_is_no_exchange_is_not_called_one(case):
    """Turned over several readings; light lost as well; too new to tell; ports alike; nothing at all."""
    assert exchange_at(*ports(**{"er_db": 20.0} | case)) is None


def test_an_excursion_that_only_passes_is_none():
    er_db = np.full(120, 25.0)
    er_db[60:63] = -25.0
    assert exchange_at(*ports(er_db, at=120)) is None


def test_of_a_swap_and_a_swap_back_the_newest_counts():
    er_db = np.where(np.arange(120) < 30, 20.0, np.where(np.arange(120) < 80, -20.0, 20.0))
    assert exchange_at(*ports(er_db, at=120)) == 80


@pytest.mark.parametrize("seed", range(20))
def test_a_random_walk_at_low_ratio_is_none(seed):
    """A fibre that drifts through 45°: its ratio changes sign, yet never at once."""
    angle = np.cumsum(0.05 * np.random.default_rng(seed).normal(size=600)) + 0.8
    assert exchange_at(1e-3 * np.cos(angle / 2) ** 2, 1e-3 * np.sin(angle / 2) ** 2) is None
