"""Long stretches go piece by piece, late data go back to a checkpoint: what is found stays the same."""

from datetime import timedelta

import numpy as np
import pytest

from analysis.models import TapCheckpoint
from ingest.models import Touch
from labmon.alarms.models import Alarm
from labmon.experiments.actions import set_limit
from labmon.pipeline import stretch
from labmon.pipeline.process import process_touched
from tests.factories import NOON, NOON_US, make_experiment, make_tap, store_readings
from tests.labmon.pipeline.lab import Feed, S, episodes, ports_of

pytestmark = pytest.mark.django_db
PART = np.concatenate([np.full(n, er) for er, n in ((30.0, 300), (18.0, 200), (30.0, 300), (22.0, 250), (30.0, 350))])


@pytest.fixture(autouse=True)
def small_pieces(monkeypatch):
    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON + timedelta(days=30))
    monkeypatch.setattr(stretch, "PIECE_READINGS", 700)
    monkeypatch.setattr(stretch, "HOUR_US", 600 * S)


def make_limit(tap):
    values = {"alarm": 20.0, "warning": 23.0, "on_delay_s": 60.0, "off_delay_s": 60.0, "deadband": 1.0}
    return set_limit(make_experiment(tap), tap, "er_db", valid_from=NOON, by=None, **values).limit


def feed_of(parts=3):
    tap = make_tap()
    return make_limit(tap), Feed(tap, np.tile(PART, parts))


EXPECTED = [(360.0, 360.0, 560.0, "alarm", 18.0), (860.0, None, 1110.0, "warning", 22.0)]


def expected(parts=3):
    length = len(PART)
    return [(raised + k * length, alarm and alarm + k * length, returned + k * length, level, value)
            for k in range(parts) for raised, alarm, returned, level, value in EXPECTED]  # fmt: skip


def test_history_at_once_goes_in_pieces():
    limit, feed = feed_of()
    feed.send(np.arange(len(feed.er_db)), now_us=int(feed.at_us[-1]) + 3600 * S)
    assert episodes(limit) == expected()
    assert TapCheckpoint.objects.filter(tap=limit.tap).count() >= 4 and not Touch.objects.exists()


@pytest.mark.parametrize("hole", [(100, 420), (700, 900), (1500, 1750), (0, 10), (2500, 4190)])
def test_late_piece_anywhere_in_a_long_history(hole):
    limit, feed = feed_of()
    index = np.arange(len(feed.er_db))
    late = (index >= hole[0]) & (index < hole[1])
    feed.send(index[~late], now_us=int(feed.at_us[-1]) + 3600 * S)
    feed.send(index[late], now_us=int(feed.at_us[-1]) + 7200 * S)
    assert episodes(limit) == expected()


def test_gap_of_days_is_stepped_over():
    limit, feed = feed_of(1)
    feed.send(np.arange(len(PART)), now_us=int(feed.at_us[-1]))
    later_us = NOON_US + 3 * 86_400 * S
    store_readings(limit.tap, later_us + np.arange(400) * S, **ports_of(np.full(400, 18.0)))
    process_touched(now_us=later_us + 401 * S)
    newest = Alarm.objects.order_by("-raised_at")[0]
    assert newest.raised_at == NOON + timedelta(days=3, seconds=60) and newest.returned_at is None
    assert Alarm.objects.count() == 3


def test_older_history_than_any_before_is_judged_too():
    limit, feed = feed_of()
    index = np.arange(len(feed.er_db))
    for batch in (index[2000:], index[900:2000], index[:900]):
        feed.send(batch, now_us=int(feed.at_us[-1]) + 3600 * S)
    assert episodes(limit) == expected()
