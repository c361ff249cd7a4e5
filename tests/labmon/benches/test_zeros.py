"""Zeros from stretches of blocked beam: entered only when complete, steady, dark and confirmed; offered from the past."""

from datetime import timedelta

import numpy as np
import pytest

from ingest.models import TapKind, Unit
from labmon.audit.models import AuditEntry
from labmon.benches.ceilings import ceiling_of
from labmon.benches.zeros import Stretch, enter_zero, harvested, zero_taking
from labmon.errors import WriteError
from labmon.people.models import Role
from tests.factories import NOON, NOON_US, make_person, make_tap, store_readings

pytestmark = pytest.mark.django_db
SECOND_US = 1_000_000
STRETCH = Stretch(NOON + timedelta(seconds=600), 60.0)
LATER_US = NOON_US + 1300 * SECOND_US


def bench(unit=Unit.W, *, dark=slice(600, 662), factor: float = 1.0, last: int = 1200):
    """Twenty minutes of light of 30 dB on 1 mW, dark in between: zeros 0.2 and 0.3 µW with 1 nW of noise."""
    tap = make_tap(unit=unit)
    rng = np.random.default_rng(3)
    port1, port2 = 1e-3 * (1 + 1e-3 * rng.normal(size=1200)), 1.3e-6 + 1e-9 * rng.normal(size=1200)
    port1[dark], port2[dark] = 2e-7 + 1e-9 * rng.normal(size=1200)[dark], 3e-7 + 1e-9 * rng.normal(size=1200)[dark]
    at_us = NOON_US + np.arange(last, dtype=np.int64) * SECOND_US
    store_readings(tap, at_us, port1=port1[:last] * factor, port2=port2[:last] * factor)
    return tap


@pytest.mark.parametrize(("unit", "factor"), [(Unit.W, 1.0), (Unit.MICROWATT, 1e6)])
def test_a_sound_stretch_gives_zeros_errors_and_floors_in_the_raw_unit(unit, factor):
    tap, person = bench(unit, factor=factor), make_person(Role.MANAGER)
    version = enter_zero(tap, STRETCH, by=person, is_blocked=True, now_us=LATER_US)
    assert version.zero1 / factor == pytest.approx(2e-7, abs=1e-9)
    assert version.zero2 / factor == pytest.approx(3e-7, abs=1e-9)
    assert version.floor2 / factor == pytest.approx(1e-9, rel=0.4)
    assert 0.7e-10 < version.zero2_error / factor < 5e-10
    assert (version.valid_from, version.zero_taken_at, version.entered_by) == (STRETCH.from_at, STRETCH.from_at, person.username)
    assert "60 readings of 60 s with the beam blocked" in AuditEntry.objects.get(action="set calibration").reason


def test_dbm_taps_get_their_zeros_in_watts():
    tap = make_tap(unit=Unit.DBM)
    at_us = NOON_US + np.arange(700, dtype=np.int64) * SECOND_US
    flicker = 0.01 * np.random.default_rng(1).normal(size=700)
    store_readings(tap, at_us, port1=np.where(np.arange(700) < 600, 0.0, -60.0) + flicker,
                   port2=np.where(np.arange(700) < 600, -30.0, -60.0) + flicker)
    version = enter_zero(tap, Stretch(STRETCH.from_at, 99.0), by=make_person(), is_blocked=True, now_us=LATER_US)
    assert version.zero2 == pytest.approx(1e-9, rel=1e-2)


def refusal(tap, *, stretch=STRETCH, is_blocked=True, now_us=LATER_US) -> str:
    with pytest.raises(WriteError) as caught:
        enter_zero(tap, stretch, by=make_person(), is_blocked=is_blocked, now_us=now_us)
    assert not tap.calibrations.exists()
    return caught.value.why


def test_what_is_not_dark_steady_complete_or_confirmed_is_refused():
    tap = bench()
    assert "blocked" in refusal(tap, is_blocked=False)
    assert "port 1 is not dark" in refusal(tap, stretch=Stretch(NOON + timedelta(seconds=300), 60.0))
    assert "port 1 is not steady" in refusal(tap, stretch=Stretch(NOON + timedelta(seconds=590), 60.0))
    assert "no reading came" in refusal(tap, stretch=Stretch(NOON - timedelta(seconds=90), 60.0))
    assert "not over yet" in refusal(bench(last=630), now_us=NOON_US + 630 * SECOND_US)
    assert "too short" in refusal(tap, stretch=Stretch(NOON, 1.0))
    assert "no zero" in refusal(make_tap(kind=TapKind.STOKES))


def test_the_watching_shows_how_far_it_is():
    taking = zero_taking(bench(last=630), STRETCH, now_us=NOON_US + 630 * SECOND_US)
    assert (taking.elapsed_s, taking.is_complete, taking.ports[1].count) == (30.0, False, 30)


def test_a_blocked_beam_of_the_past_is_offered_and_fit():
    tap = bench()
    (offer,) = harvested(tap, now_us=LATER_US)
    assert (offer.from_at, offer.seconds) == (NOON + timedelta(seconds=601), 59.0)
    assert enter_zero(tap, offer, by=make_person(), is_blocked=True, now_us=LATER_US).zero2 == pytest.approx(3e-7, abs=1e-9)


def test_the_ceiling_follows_from_the_zero_just_taken():
    """10 log10(bright / (1.96 sqrt(zero error² + floor²))): 95 % bound of nothing (docs/formulas.md, F-26, F-27); by hand."""
    from ingest.store.read import newest_readings

    tap = bench()
    version = enter_zero(tap, STRETCH, by=make_person(), is_blocked=True, now_us=LATER_US)
    ceiling = ceiling_of(tap, version, newest_readings([tap.pk], count=60)[tap.pk])
    by_hand_db = 10 * np.log10(1e-3 / (1.96 * np.hypot(version.zero2_error, version.floor2)))
    assert ceiling.er_db == pytest.approx(by_hand_db, abs=0.02)
    assert (ceiling.worst.value, ceiling.missing) == ("noise", ())
    assert ceiling_of(tap, None, newest_readings([tap.pk])[tap.pk]).missing == ("zero", "floor")
