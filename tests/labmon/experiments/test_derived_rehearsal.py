"""Derived limits rehearsed: the same episodes as the pipeline found over the same minutes."""

import numpy as np
import pytest

from ingest.times import at_of
from labmon.alarms.models import Alarm
from labmon.experiments.actions import set_limit
from labmon.experiments.rehearsal import hosts_of, present_hosts, rehearse_limit
from labmon.experiments.rules import LimitWish
from labmon.pipeline.catch_up import catch_up
from tests.factories import NOON, NOON_US, make_experiment, make_tap, store_readings
from tests.labmon.pipeline.lab import ports_of

pytestmark = pytest.mark.django_db
S = 1_000_000
WISHES = {"trusted_share": LimitWish(alarm=0.8, off_delay_s=300.0, window_s=600.0),
          "time_to_limit_s": LimitWish(alarm=3600.0, warning=7200.0, on_delay_s=600.0, off_delay_s=900.0, deadband=1800.0)}


@pytest.fixture
def past(monkeypatch):
    """Nine hours read each 10 s: calm, then 2° an hour for 5 h, then back; untrusted 3 of 10 minutes for half an hour."""
    angle = np.concatenate([np.full(1080, 3.0), 3.0 + 2.0 / 360 * np.arange(1800), np.full(360, 3.0)])
    angle = angle + np.random.default_rng(1).normal(0, 0.02, len(angle))
    now_us = NOON_US + len(angle) * 10 * S + 3600 * S
    monkeypatch.setattr("django.utils.timezone.now", lambda: at_of(now_us))
    tap = make_tap(interval_s=10.0)
    experiment = make_experiment(tap)
    set_limit(experiment, tap, "er_db", alarm=20.0, valid_from=NOON, by=None)
    limits = {quantity: set_limit(experiment, tap, quantity, valid_from=NOON, by=None, alarm=wish.alarm, warning=wish.warning,
                                  on_delay_s=wish.on_delay_s, off_delay_s=wish.off_delay_s, deadband=wish.deadband,
                                  window_s=wish.window_s).limit
              for quantity, wish in WISHES.items()}
    index = np.arange(len(angle))
    ports = ports_of(-20 * np.log10(np.tan(np.radians(angle) / 2)))
    ports["port1"][(index >= 360) & (index < 540) & (index // 6 % 10 < 3)] = -1.0
    store_readings(tap, NOON_US + index * 10 * S, sequence=index, boot="b", **ports)
    catch_up(now_us)
    return tap, experiment, limits, now_us


@pytest.mark.parametrize("quantity", list(WISHES))
def test_the_same_as_the_pipeline_found(past, quantity):
    tap, experiment, limits, now_us = past
    found = rehearse_limit(tap, quantity, WISHES[quantity], NOON_US, now_us, now_us, hosts=hosts_of(experiment, tap))
    rows = Alarm.objects.filter(limit=limits[quantity]).order_by("raised_at")
    said = [(at_of(one.raised_us), one.returned_us and at_of(one.returned_us)) for one in found.calls]
    assert said == [(row.raised_at, row.returned_at) for row in rows] and len(said) == 1
    assert found.read_share == 0.0


def test_lead_before_the_limit_run_towards(past):
    tap, experiment, _, now_us = past
    wish = WISHES["time_to_limit_s"]
    found = rehearse_limit(tap, "time_to_limit_s", wish, NOON_US, now_us, now_us, hosts=present_hosts(experiment, tap))
    assert 3600 < found.calls[0].lead_s < 7600
    assert rehearse_limit(tap, "time_to_limit_s", wish, NOON_US, now_us, now_us).calls == []
