"""The gain ratio by exchange of the polarizations, through the page."""

from datetime import timedelta

import numpy as np
import pytest

from labmon.people.models import Role
from tests.factories import NOON, NOON_US, make_person, make_station, make_tap, store_readings
from tests.labmon.screen.test_pages import words

pytestmark = pytest.mark.django_db
ADDRESS = "/stations/n2/taps/eom-in/gain/"
TYPED = {"straight": "2031-03-04 12:00:00", "exchanged": "2031-03-04 12:02:00", "seconds": "60"}


@pytest.fixture(autouse=True)
def _later(monkeypatch):
    """The readings lie in 2031: the server's clock stands behind them."""
    monkeypatch.setattr("labmon.benches.exposures.server_now_us", lambda: NOON_US + 10_000 * 1_000_000)


@pytest.fixture
def tap(client):
    """Gains 2 : 1, 20 dB, exchanged after two minutes while the power falls to 0.8; zeros 0."""
    made = make_tap(make_station("n2"), "eom-in")
    flicker = 1.0 + 1e-3 * np.random.default_rng(5).normal(size=(2, 240))
    power = np.where(np.arange(240) < 120, 1e-3, 0.8e-3)
    is_straight = np.arange(240) < 120
    bright, dark = power / 1.01, power / 1.01 * 0.01
    store_readings(made, NOON_US + np.arange(240, dtype=np.int64) * 1_000_000,
                   port1=2.0 * np.where(is_straight, bright, dark) * flicker[0],
                   port2=np.where(is_straight, dark, bright) * flicker[1])
    client.force_login(make_person(Role.MANAGER))
    return made


def test_the_gain_is_found_free_of_power_and_entered(client, tap):
    said = words(client.post(ADDRESS, TYPED | {"act": "look"}, follow=True))
    assert "of n2/eom-in reads 2.00" in said or "of n2/eom-in reads 1.999" in said
    assert "free of any gain, is 20.0 dB" in said
    assert not tap.calibrations.exists()
    assert client.post(ADDRESS, TYPED | {"act": "enter"}).status_code == 302
    version = tap.calibrations.get()
    assert version.gain_ratio == pytest.approx(2.0, rel=5e-4)
    assert version.valid_from == NOON


def test_light_that_was_not_exchanged_is_refused(client, tap):
    typed = TYPED | {"exchanged": (NOON + timedelta(seconds=60)).strftime("%Y-%m-%d %H:%M:%S"), "seconds": "50", "act": "enter"}
    answer = client.post(ADDRESS, typed)
    assert answer.status_code == 422 and "was not exchanged" in words(answer)
    typed = TYPED | {"exchanged": "2031-03-04 13:00:00", "act": "look"}
    assert "Only 0 readings" in words(client.post(ADDRESS, typed, follow=True))
    assert not tap.calibrations.exists()


def test_only_who_may_calibrate(client, tap):
    client.force_login(make_person(Role.RESEARCHER))
    assert client.get(ADDRESS).status_code == 403
