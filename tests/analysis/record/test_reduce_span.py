"""Many taps in one go give what each gives alone, with the calibrations that held at each moment."""

from datetime import timedelta

import numpy as np
import pytest
from django.utils import timezone

from analysis.judge.rule import Quantity
from analysis.record.calibrations import new_version
from analysis.record.reduce_span import knowledge_of, reduce_many, reduced_samples
from analysis.reduce.trust import QUANTITIES, Reason, Trust
from ingest.models import TapKind, Unit
from ingest.store.append import write_blocks
from ingest.store.read import read_many
from tests.factories import NOON, NOON_US, make_tap, store_readings

pytestmark = pytest.mark.django_db
SECONDS_US = NOON_US + np.arange(5) * 1_000_000


def store(tap, columns, at_us=SECONDS_US, **more):
    store_readings(tap, at_us, **more, **columns)
    return tap


def test_example_of_the_job_paper():
    """1.000 mW against 1.000 uW is 30 dB (10 log10 of the ratio); with a zero of 0.300 uW on port 2 it is 31.55 dB."""
    tap = store(make_tap(unit=Unit.MILLIWATT), {"port1": 1.0, "port2": 1e-3})
    np.testing.assert_allclose(reduced_samples(tap, NOON_US, NOON_US + 10**7).er_db, 30.0, atol=1e-9)
    new_version(tap, NOON, {"zero2": 0.3e-3})
    np.testing.assert_allclose(reduced_samples(tap, NOON_US, NOON_US + 10**7).er_db, 31.549, atol=1e-3)


def test_each_sample_has_the_version_of_its_time_and_old_knowledge_can_be_asked_for():
    tap = store(make_tap(), {"port1": 1e-3, "port2": 1e-6})
    new_version(tap, NOON + timedelta(seconds=2), {"gain_ratio": 2.0})
    before = timezone.now()
    new_version(tap, NOON + timedelta(seconds=2), {"gain_ratio": 4.0})
    er_db = reduced_samples(tap, NOON_US, NOON_US + 10**7).er_db
    np.testing.assert_allclose(er_db, [30, 30, *[30 - 10 * np.log10(4)] * 3], atol=1e-9)
    er_db = reduced_samples(tap, NOON_US, NOON_US + 10**7, as_of=before).er_db
    np.testing.assert_allclose(er_db, [30, 30, *[30 - 10 * np.log10(2)] * 3], atol=1e-9)


def test_of_a_boot_timed_by_the_server_only_wrong_stamps_are_doubted():
    """A board that was at 1970 for two readings and then got the time: the rest is as good as any."""
    own_us = SECONDS_US + 40_000
    own_us[:2] = [1_000_000, 2_000_000]
    tap = make_tap()
    ports = {"port1": np.full(5, 1e-3), "port2": np.full(5, 1e-6)}
    write_blocks(tap, SECONDS_US, ports, arrival_us=SECONDS_US, own_at_us=own_us, is_server_timed=True)
    reduced = reduced_samples(tap, NOON_US, NOON_US + 10**7)
    assert (reduced.reasons[Quantity.ER_DB] == Reason.CLOCK_UNSET).tolist() == [True, True, False, False, False]
    assert reduced.trust[Quantity.ER_DB].tolist() == [Trust.DOUBTFUL] * 2 + [Trust.TRUSTED] * 3


def test_many_taps_of_all_kinds_give_what_each_gives_alone():
    generator = np.random.default_rng(7)
    noise = lambda: 1 + 0.01 * generator.standard_normal(5)  # noqa: E731
    taps = [
        store(make_tap(), {"port1": 1e-3 * noise(), "port2": 1e-5 * noise()}),
        store(make_tap(), {"port1": 2e-3 * noise(), "port2": 1e-6 * noise(), "temperature_c": 21.0}),
        store(make_tap(unit=Unit.DBM), {"port1": -3.0 * noise(), "port2": -30.0 * noise()}),
        store(make_tap(kind=TapKind.STOKES), {"s0": 1.0, "s1": 0.9 * noise(), "s2": 0.3, "s3": -0.2}),
        store(make_tap(kind=TapKind.STOKES), {"azimuth_deg": 10.0 * noise(), "ellipticity_deg": -5.0}),
        store(make_tap(kind=TapKind.DARK_PORT), {"port2": 1e-6 * noise()}),
        store(make_tap(kind=TapKind.CLIMATE), {"temperature_c": 20.0 * noise()}),
        make_tap(),
    ]
    new_version(taps[1], NOON + timedelta(seconds=3), {"zero2": 1e-7, "leakage": [[1, 0.001], [0.001, 1]], "floor2": 1e-9})
    new_version(taps[3], NOON, {"wanted_state": [1, 0, 0], "handedness": "ieee"})
    new_version(taps[5], NOON, {"bright_nominal": 1e-3})
    spans = {tap.pk: (NOON_US, NOON_US + 10**7) for tap in taps}
    many = reduce_many(taps, read_many(spans), knowledge_of(spans), {})
    for tap in taps:
        alone, together = reduced_samples(tap, *spans[tap.pk]), many.samples_of(tap.pk)
        assert len(alone) == len(together)
        for quantity in QUANTITIES:
            np.testing.assert_array_equal(together.values(quantity), alone.values(quantity))
            np.testing.assert_array_equal(together.trust[quantity], alone.trust[quantity])


def test_polarimeter_that_changes_its_form_keeps_its_order():
    tap = make_tap(kind=TapKind.STOKES)
    store(tap, {"s0": 1.0, "s1": 1.0, "s2": 0.0, "s3": 0.0}, at_us=SECONDS_US[::2])
    store(tap, {"azimuth_deg": 45.0, "ellipticity_deg": 0.0}, at_us=SECONDS_US[1::2])
    azimuth_deg = np.degrees(reduced_samples(tap, NOON_US, NOON_US + 10**7).azimuth_rad)
    np.testing.assert_allclose(azimuth_deg, [0, 45, 0, 45, 0], atol=1e-9)


def test_frozen_port_is_marked_alike_however_the_readings_are_cut():
    tap = make_tap()
    generator = np.random.default_rng(3)
    count = 200
    port2 = np.round(1e-6 * (1 + 0.1 * generator.standard_normal(count)), 9)
    port2[120:180] = port2[119]
    at_us = NOON_US + np.arange(count) * 1_000_000
    store(tap, {"port1": 1e-3 * (1 + 0.01 * generator.standard_normal(count)), "port2": port2}, at_us=at_us)
    whole = reduced_samples(tap, NOON_US, NOON_US + 10**9)
    is_flat = (whole.reasons[Quantity.ER_DB] & Reason.FLAT) != 0
    assert is_flat[:140].sum() == 0 and is_flat[150:180].all() and not is_flat[181:].any()
    span = {tap.pk: (NOON_US, NOON_US + 10**9)}
    readings, known = read_many(span), knowledge_of(span)
    cuts = (NOON_US + 100 * 10**6, NOON_US + 160 * 10**6)
    cut = reduce_many([tap], readings, known, {}, {tap.pk: cuts})
    np.testing.assert_array_equal(cut.samples_of(tap.pk).reasons[Quantity.ER_DB], whole.reasons[Quantity.ER_DB])
    later = {tap.pk: readings[tap.pk].between(cuts[1], NOON_US + 10**9)}
    rest = reduce_many([tap], later, known, {tap.pk: cut.flat[tap.pk][1]})
    np.testing.assert_array_equal(rest.samples_of(tap.pk).reasons[Quantity.ER_DB], whole.reasons[Quantity.ER_DB][160:])


def test_two_devices_on_one_key_are_untrusted_while_both_speak():
    tap = make_tap()
    one, other = NOON_US + np.arange(0, 20, 2) * 10**6, NOON_US + np.arange(9, 29, 2) * 10**6
    for at_us, boot in ((one, "first"), (other, "second")):
        store(tap, {"port1": 1e-3, "port2": 1e-6}, at_us=at_us, boot=boot, sequence=np.arange(10))
    samples = reduced_samples(tap, NOON_US, NOON_US + 10**8)
    doubled = (samples.reasons[Quantity.ER_DB] & Reason.TWO_DEVICES) != 0
    np.testing.assert_array_equal(doubled, (samples.at_us >= NOON_US + 9 * 10**6) & (samples.at_us <= NOON_US + 21 * 10**6))
    assert (samples.trust[Quantity.ER_DB][doubled] == Trust.UNTRUSTED).all()


def test_spool_of_an_old_boot_is_no_second_device():
    tap = make_tap()
    store(tap, {"port1": 1e-3, "port2": 1e-6}, at_us=NOON_US + np.arange(20, 30) * 10**6, boot="new", sequence=np.arange(10))
    store(tap, {"port1": 1e-3, "port2": 1e-6}, at_us=NOON_US + np.arange(10) * 10**6, boot="old", sequence=np.arange(10))
    assert not (reduced_samples(tap, NOON_US, NOON_US + 10**8).reasons[Quantity.ER_DB] & Reason.TWO_DEVICES).any()


def test_zero_older_than_thirty_days_casts_doubt():
    tap = store(make_tap(), {"port1": 1e-3, "port2": 1e-6})
    new_version(tap, NOON - timedelta(days=30, seconds=-2), {"zero2": 0.0})
    reasons = reduced_samples(tap, NOON_US, NOON_US + 10**7).reasons[Quantity.ER_DB]
    np.testing.assert_array_equal((reasons & Reason.OLD_ZERO) != 0, [False, False, False, True, True])
