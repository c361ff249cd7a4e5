"""Two beats may run; one counts."""

import os

import psycopg
import pytest
from celery import Celery
from django.conf import settings

from labmon.engines.beat import LOOK_AGAIN_S, BeatLock, OneBeatScheduler
from labmon.services import conninfo_of

CONNINFO = conninfo_of(settings.DATABASES["default"] | {"NAME": "postgres"})


@pytest.fixture
def locks():
    pair = BeatLock(CONNINFO), BeatLock(CONNINFO)
    yield pair
    for lock in pair:
        lock.release()


def test_only_one_holds(locks):
    one, other = locks
    assert one.is_held() and not other.is_held()
    assert one.is_held(), "and goes on holding"
    one.release()
    assert other.is_held()


def test_lock_moves_on_when_its_holder_loses_the_database(locks):
    one, other = locks
    assert one.is_held()
    with psycopg.connect(**CONNINFO, autocommit=True) as database:
        database.execute("select pg_terminate_backend(%s, 5000)", [one.connection.info.backend_pid])
    assert other.is_held()
    assert not one.is_held()


def test_database_away_means_no():
    lock = BeatLock({"host": "/nowhere", "dbname": "none"})
    assert not lock.is_held()


def test_scheduler_sends_only_under_the_lock(locks, monkeypatch):
    app = Celery("beat-test", broker=os.environ["LABMON_BROKER_URL"])
    app.conf.beat_schedule = {"often": {"task": "labmon.never", "schedule": 0.0}}
    monkeypatch.setitem(settings.DATABASES["default"], "NAME", "postgres")
    sent = []
    monkeypatch.setattr(OneBeatScheduler, "send_task", lambda self, name, *args, **kwargs: sent.append(name))
    one, _ = locks
    scheduler = OneBeatScheduler(app=app)
    assert one.is_held()
    assert scheduler.tick() == LOOK_AGAIN_S and sent == []
    one.release()
    scheduler.tick()
    assert sent == ["labmon.never"]
    scheduler.close()
    assert one.is_held(), "closing gives the lock back"
