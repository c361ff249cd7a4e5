"""Rehearsed over stored readings: the same episodes as the live pipeline found."""

import numpy as np
import pytest

from ingest.times import at_of
from labmon.alarms.models import Alarm
from labmon.errors import WriteError
from labmon.experiments.actions import set_limit
from labmon.experiments.rehearsal import rehearse_limit
from labmon.experiments.rules import LimitWish
from labmon.pipeline.catch_up import catch_up
from tests.factories import NOON, NOON_US, make_experiment, make_tap, store_readings

pytestmark = pytest.mark.django_db
S = 1_000_000
HOURS_S = 3 * 3600
NOW_US = NOON_US + 10 * 3600 * S


@pytest.fixture
def past(monkeypatch):
    """Three hours of noisy light with excursions; a limit judged them as the pipeline does."""
    monkeypatch.setattr("django.utils.timezone.now", lambda: at_of(NOW_US))
    tap = make_tap()
    er_db = np.full(HOURS_S, 30.0)
    for start, length, level in ((1000, 200, 18), (4000, 30, 18), (6000, 900, 21), (6400, 200, 18), (10_700, 100, 18)):
        er_db[start : start + length] = level
    er_db += np.random.default_rng(5).normal(0, 0.1, HOURS_S)
    at_us = NOON_US + np.arange(HOURS_S) * S
    limit = set_limit(make_experiment(tap), tap, "er_db", alarm=20.0, warning=23.0, valid_from=NOON, by=None).limit
    store_readings(tap, at_us, port1=1e-3, port2=1e-3 * 10 ** (-er_db / 10), sequence=np.arange(HOURS_S), boot="b")
    catch_up(NOW_US)
    return tap, limit


def test_the_same_as_the_pipeline_found(past):
    tap, limit = past
    found = rehearse_limit(tap, "er_db", LimitWish(alarm=20.0, warning=23.0), NOON_US, NOON_US + HOURS_S * S, NOW_US, hard=19.0)
    rows = Alarm.objects.filter(limit=limit).order_by("raised_at")
    said = [(at_of(one.raised_us), one.returned_us and at_of(one.returned_us)) for one in found.calls]
    assert said == [(row.raised_at, row.returned_at) for row in rows] and len(said) == 3
    assert found.calls[1].lead_s == pytest.approx(400 - 60) and found.at_night == 0
    assert found.read_share < 1


def test_a_looser_limit_calls_less_and_nothing_is_written(past):
    tap, _ = past
    before = Alarm.objects.count()
    assert rehearse_limit(tap, "er_db", LimitWish(alarm=15.0), NOON_US, NOW_US, NOW_US).calls == []
    assert Alarm.objects.count() == before


@pytest.mark.parametrize("days", [0, 32, -1])
def test_the_span_is_bounded(past, days):
    tap, _ = past
    with pytest.raises(WriteError, match="span"):
        rehearse_limit(tap, "er_db", LimitWish(alarm=20.0), NOW_US - days * 86_400 * S, NOW_US, NOW_US)
