"""A splitter's leakage from two exposures of stored readings: entered with its uncertainty, and what refuses it."""

from datetime import timedelta

import numpy as np
import pytest

from analysis.record.reduce_span import reduced_samples
from ingest.models import TapKind, Unit
from ingest.store.read import newest_readings, read_readings
from labmon.audit.models import AuditEntry
from labmon.benches.calibration import set_calibration
from labmon.benches.ceilings import ceiling_of
from labmon.benches.leakages import enter_leakage, leakage_taking
from labmon.benches.zeros import Stretch
from labmon.errors import WriteError
from tests.factories import NOON, NOON_US, make_person, make_tap, store_readings

pytestmark = pytest.mark.django_db
SPLITTER = np.array([[0.998, 0.0005], [0.002, 0.9995]])
ONE, TWO = Stretch(NOON, 60.0), Stretch(NOON + timedelta(seconds=120), 60.0)
LATER_US = NOON_US + 1000 * 1_000_000


def bench(unit=Unit.W, *, factor=1.0, exchanged=120, gain=1.0, light_er_db=60.0):
    """Four minutes of 1 mW, meant for port 2 from `exchanged` on; zeros 0.2 and 0.3 µW, noise 1 nW, source noise 0.1 %."""
    tap = make_tap(unit=unit)
    rng = np.random.default_rng(8)
    power = 1e-3 * (1 + 1e-3 * rng.normal(size=240))
    own = 10.0 ** (-light_er_db / 10.0)
    light = np.where(np.arange(240) < exchanged, np.array([[1.0], [own]]), np.array([[own], [1.0]])) * power / (1.0 + own)
    ports = SPLITTER @ light + 1e-9 * rng.normal(size=(2, 240))
    ports = (ports * [[1.0], [1.0 / gain]] + [[2e-7], [3e-7]]) * factor
    store_readings(tap, NOON_US + np.arange(240, dtype=np.int64) * 1_000_000, port1=ports[0], port2=ports[1])
    sizes = {"zero1": 2e-7, "zero2": 3e-7, "zero1_error": 1e-10, "zero2_error": 1e-10, "floor1": 1e-9, "floor2": 1e-9}
    values = {name: size * factor for name, size in sizes.items()}
    set_calibration(tap, NOON - timedelta(hours=1), values | {"gain_ratio": gain}, by=None)
    return tap


@pytest.mark.parametrize(("unit", "factor", "gain"), [(Unit.W, 1.0, 1.0), (Unit.MICROWATT, 1e6, 2.0)])
def test_the_splitter_is_found_and_entered_with_its_uncertainty(unit, factor, gain):
    tap = bench(unit, factor=factor, gain=gain)
    version = enter_leakage(tap, ONE, TWO, by=make_person(), light_er_db=60.0, now_us=LATER_US)
    for row, column in ((1, 0), (0, 1)):
        assert abs(version.leakage[row][column] - SPLITTER[row, column]) < 4 * version.leakage_sigma[row][column]
        assert 1e-7 < version.leakage_sigma[row][column] < 2e-6
    assert (version.valid_from, version.zero1_error) == (NOON, 1e-10 * factor)
    assert "leakage from two exposures, light of 60 dB" in AuditEntry.objects.latest("pk").reason


def test_the_order_of_the_exposures_is_free():
    tap = bench()
    straight = leakage_taking(tap, ONE, TWO, now_us=LATER_US).leakage
    turned = leakage_taking(tap, TWO, ONE, now_us=LATER_US).leakage
    np.testing.assert_array_equal(straight.matrix, turned.matrix)


def test_it_is_taken_off_with_its_uncertainty_and_lifts_the_ceiling():
    """27 dB are hidden behind 0.2 % by a splitter: 10 log10(0.998/0.002) = 26.98; taken off, 60 dB light reads far above."""
    tap = bench()
    samples = reduced_samples(tap, NOON_US, NOON_US + 60_000_000)
    assert np.median(samples.er_db) == pytest.approx(26.98, abs=0.02)
    version = enter_leakage(tap, ONE, TWO, by=make_person(), light_er_db=40.0, now_us=LATER_US)
    after = reduced_samples(tap, NOON_US, NOON_US + 60_000_000)
    assert np.nanmedian(after.er_db) > 40.0
    assert np.nanmedian(after.er_sigma_db) > 0.5
    ceiling = ceiling_of(tap, version, read_readings(tap.pk, NOON_US, NOON_US + 60_000_000))
    by_hand_db = -10 * np.log10(1.96 * 1e-4 / np.sqrt(12.0))
    assert (ceiling.worst.value, ceiling.missing) == ("leakage error", ())
    assert ceiling.er_db == pytest.approx(by_hand_db, abs=0.3)


def refusal(tap, one=ONE, two=TWO, **options) -> str:
    with pytest.raises(WriteError) as caught:
        leakage_taking(tap, one, two, **{"now_us": LATER_US} | options)
    return f"{caught.value.why} {caught.value.do}"


def test_what_is_no_pair_of_exposures_is_refused():
    tap = bench()
    assert "was not exchanged" in refusal(tap, two=Stretch(NOON + timedelta(seconds=55), 60.0))
    assert "only 0 readings" in refusal(tap, two=Stretch(NOON - timedelta(seconds=500), 60.0)).lower()
    assert "not steady" in refusal(tap, one=Stretch(NOON + timedelta(seconds=90), 60.0))
    assert "not over yet, in the second stretch" in refusal(tap, two=Stretch(NOON + timedelta(seconds=200), 100.0),
                                                             now_us=NOON_US + 250_000_000)
    assert "too short" in refusal(tap, one=Stretch(NOON, 1.0))
    assert "not two ports" in refusal(make_tap(kind=TapKind.STOKES))
    set_calibration(tap, NOON, {"saturation1": 0.9e-3}, by=None)
    assert "saturation" in refusal(tap)


def test_a_leakage_by_hand_forgets_the_uncertainty_of_the_one_before():
    tap = bench()
    enter_leakage(tap, ONE, TWO, by=make_person(), now_us=LATER_US)
    version = set_calibration(tap, NOON, {"leakage": [[0.99, 0.0], [0.01, 1.0]]}, by=None)
    assert version.leakage_sigma is None
    ceiling = ceiling_of(tap, version, newest_readings([tap.pk], count=60)[tap.pk])
    assert "uncertainty of the leakage" in ceiling.missing
