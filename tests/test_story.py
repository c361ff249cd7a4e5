"""The main job in one piece: a reading comes in at the door, an alarm reaches the open page and the owner's mailbox.

Nothing is imitated here but the mail server: the lab's own ASGI application, PostgreSQL, Valkey, a Celery worker and the
channel layer are the real ones. Read it from top to bottom; each test is a chapter, each comment a step.
"""

import asyncio
import time
from contextlib import contextmanager
from datetime import UTC, datetime

import httpx
import pytest
from celery.contrib.testing.worker import start_worker
from celery.signals import task_postrun, worker_process_init
from channels.testing import WebsocketCommunicator
from django.core import mail
from django.db import connections
from django.test import Client

from analysis.models import TapNow
from ingest.models import DoorUp, Touch
from ingest.store.read import read_readings
from ingest.times import at_of, now_us
from labmon.alarms.models import Alarm
from labmon.asgi import application
from labmon.audit.models import AuditEntry
from labmon.benches.actions import TapWish, add_bench
from labmon.benches.calibration import set_calibration
from labmon.celery import app as celery_app
from labmon.celery import keep_connection
from labmon.experiments.actions import create_experiment, set_limit
from labmon.people.keys import make_person_key
from labmon.people.models import Role
from labmon.pipeline.hint import ask_for_judging
from labmon.pipeline.lanes import Lane, queue_of
from labmon.pipeline.schedule import BEAT_SCHEDULE
from labmon.pipeline.silence import judge_silence
from labmon.pipeline.tasks import tell_task
from labmon.tell.models import Message
from tests.factories import make_person
from tests.running_lab import free_port, until_true

pytestmark = pytest.mark.django_db(transaction=True)

S = 1_000_000
FLOOR_W = 1e-9
WITHIN_S = 15.0


class Story:
    """A bench of the owner's with one two-port tap, watched by an experiment: ER at least 20 dB, 5 s of delay each way.

    Data time begins half a minute ago, so that what happens is of now.
    """

    def __init__(self) -> None:
        self.loop = asyncio.new_event_loop()
        self.web = httpx.AsyncClient(transport=httpx.ASGITransport(application), base_url="http://localhost")
        self.owner = make_person(Role.OWNER, email="owner@lab.example")
        taps = [TapWish("eom-in", "two-port", "W", 1.0)]
        station, self.station_key = add_bench("b08", taps=taps, owner=self.owner, by=self.owner)
        self.tap = station.taps.get()
        set_calibration(self.tap, datetime(2020, 1, 1, tzinfo=UTC), {"floor1": FLOOR_W, "floor2": FLOOR_W}, by=self.owner)
        self.experiment = create_experiment("EOM input", [self.tap], by=self.owner, no_reading_after_s=30.0)
        set_limit(self.experiment, self.tap, "er_db", alarm=20.0, on_delay_s=5.0, off_delay_s=5.0, deadband=1.0, by=self.owner)
        self.start_us = now_us() // S * S - 30 * S
        self.page: WebsocketCommunicator | None = None

    def do(self, work):
        """Wait for something asynchronous."""
        return self.loop.run_until_complete(work)

    def batch(self, first, count, *, er_db=30.0, **more):
        """One reading a second of light with this extinction ratio, as the station sends it."""
        numbers = list(range(first, first + count))
        columns = {"sequence": numbers, "at": [self.start_us + number * S for number in numbers],
                   "port1": [1e-3] * count, "port2": [1e-3 * 10 ** (-er_db / 10)] * count} | more
        return {"boot": "7f3a9c21", "now": {"at": now_us()}, "taps": {"eom-in": columns}}

    def send(self, body):
        """The door's answer, which must be 200."""
        answer = self.do(self.web.post("/api/v1/readings", json=body, headers={"Authorization": f"Bearer {self.station_key}"}))
        assert answer.status_code == 200, answer.text
        return {name: answer.json()[name] for name in ("stored", "known", "set_aside")}

    def stored(self):
        """Numbers of the readings that the lab holds."""
        return read_readings(self.tap.pk, self.start_us, self.start_us + 3600 * S).sequence.tolist()

    def open_page(self):
        """The owner signs in and opens a page: its live socket."""
        browser = Client()
        browser.force_login(self.owner)
        cookie = f"sessionid={browser.cookies['sessionid'].value}".encode()
        self.page = WebsocketCommunicator(application, "/live/",
                                          headers=[(b"cookie", cookie), (b"host", b"localhost"), (b"origin", b"http://localhost")])
        is_in, _ = self.do(self.page.connect(timeout=WITHIN_S))
        assert is_in

    def page_hears(self, kind):
        """Ids in the page's next message about changes of this kind."""
        until_s = time.monotonic() + WITHIN_S
        while (left_s := until_s - time.monotonic()) > 0:
            message = self.do(self.page.receive_json_from(timeout=left_s))
            if kind in message.get("changed", {}):
                return message["changed"][kind]
        raise AssertionError(f"the page heard of no {kind} within {WITHIN_S} s")

    def acknowledge(self, alarm, note):
        """A person acknowledges by the API."""
        _, key = make_person_key(self.owner, by=self.owner)
        answer = self.do(self.web.post(f"/api/v1/alarms/{alarm.pk}/acknowledge", json={"note": note},
                                       headers={"Authorization": f"Bearer {key}"}))
        assert answer.status_code == 200, answer.text
        return answer.json()

    def sweep(self):
        """What beat sends every second, whatever the door has told."""
        celery_app.tasks[BEAT_SCHEDULE["judge what no hint told of"]["task"]]()

    def close(self):
        if self.page is not None:
            self.do(self.page.disconnect())
        self.do(self.web.aclose())
        self.do(application.door.close())
        self.do(self.loop.shutdown_default_executor())
        self.loop.close()


@pytest.fixture
def story(transactional_db):
    told = Story()
    yield told
    told.close()


@pytest.fixture
def worker(transactional_db, monkeypatch):
    """A Celery worker on the session's broker, in a thread of this process: so it may not keep its database connection."""
    def let_go(**_):
        connections.close_all()

    worker_process_init.disconnect(keep_connection)
    task_postrun.connect(let_go)
    monkeypatch.setattr(ask_for_judging, "_next_s", 0.0)
    lanes = [queue_of(lane) for lane in Lane]
    with start_worker(celery_app, pool="solo", perform_ping_check=False, shutdown_timeout=30.0, queues=lanes):
        yield
    task_postrun.disconnect(let_go)
    worker_process_init.connect(keep_connection)


@contextmanager
def _broker_at(url, settings, monkeypatch):
    """Celery and the channel layer find their broker at ``url``."""
    layers = settings.CHANNEL_LAYERS
    with monkeypatch.context() as patch:
        patch.setattr(ask_for_judging, "_next_s", 0.0)
        patch.setattr(celery_app, "_pool", None)
        patch.setattr(celery_app.amqp, "_producer_pool", None)
        patch.setitem(celery_app.conf, "broker_url", url)
        settings.CHANNEL_LAYERS = {"default": layers["default"] | {"CONFIG": {"hosts": [url]}}}
        yield
    settings.CHANNEL_LAYERS = layers


def test_from_the_door_to_the_open_page_and_the_mailbox(story, worker):
    # The owner has a page open. Calm light comes in: stored, judged by the worker, no alarm.
    story.open_page()
    assert story.send(story.batch(0, 10)) == {"stored": 10, "known": 0, "set_aside": []}
    assert story.page_hears("tap") == [story.tap.pk]
    assert not Alarm.objects.exists()

    # The light turns: 18 dB for twelve seconds. The open page hears of an alarm.
    low = story.batch(10, 12, er_db=18.0)
    story.send(low)
    (alarm_id,) = story.page_hears("alarm")
    alarm = Alarm.objects.get(pk=alarm_id)
    assert (alarm.kind, alarm.level, alarm.state) == ("limit", "alarm", "unacknowledged")
    assert alarm.raised_at == at_of(story.start_us + 15 * S)    # below from 10 on, five seconds of delay
    assert alarm.message == "b08/eom-in: extinction ratio 18.0 dB is below its alarm limit 20.0 dB by 2.0 dB (2.9°)"

    # One mail waits; the outbox's task sends it once, however often it runs.
    for _ in range(2):
        tell_task()
    (sent,) = mail.outbox
    assert sent.to == ["owner@lab.example"] and sent.subject == f"alarm: {alarm.message}"

    # The station did not hear the answer and sends the same batch again: nothing changes.
    assert story.send(low) == {"stored": 0, "known": 12, "set_aside": []}
    story.sweep()
    assert story.stored() == list(range(22))
    assert Alarm.objects.get().changed == alarm.changed and Message.objects.count() == 1

    # The owner acknowledges: the audit says so, and every open page hears of it.
    assert story.acknowledge(alarm, "polarizer was touched")["state"] == "acknowledged"
    assert story.page_hears("alarm") == [alarm_id]
    row = AuditEntry.objects.filter(action="acknowledge alarm").get()
    assert (row.person, row.after, row.reason) == (story.owner, {"state": "acknowledged"}, "polarizer was touched")

    # The light is good again for longer than the off-delay: the episode ends, and nobody is mailed again.
    story.send(story.batch(22, 8))
    assert story.page_hears("alarm") == [alarm_id]
    alarm.refresh_from_db()
    assert (alarm.state, alarm.returned_at) == ("normal", at_of(story.start_us + 27 * S))
    tell_task()
    assert len(mail.outbox) == 1


def test_a_dead_broker_costs_hints_only(story, settings, monkeypatch, caplog):
    # The broker's address leads nowhere, for hints as for pages.
    nowhere = f"redis://127.0.0.1:{free_port()}/0"
    with _broker_at(nowhere, settings, monkeypatch):
        # The door does not care: 200, and the hint fails behind its back.
        assert story.send(story.batch(0, 12, er_db=18.0))["stored"] == 12
        assert until_true(lambda: "hint_failed" in caplog.text, WITHIN_S)
        assert Touch.objects.filter(tap=story.tap).exists() and not Alarm.objects.exists()

        # Even judging goes through without it; only the pages are not told.
        story.sweep()
        assert Alarm.objects.get().state == "unacknowledged" and "publish_failed" in caplog.text

    # It is back: a page opens, the next reading is heard of, and nothing is told twice.
    story.open_page()
    story.send(story.batch(12, 1, er_db=18.0))
    story.sweep()
    assert story.page_hears("tap") == [story.tap.pk]
    assert Alarm.objects.count() == Message.objects.count() == 1 and not Touch.objects.exists()


def test_silence_is_noticed_on_the_servers_clock(story):
    # Readings come, then none. The door is up all the time (its heartbeat writes this down each second).
    story.send(story.batch(0, 10))
    story.sweep()
    heard_us = story.tap.heard.last_arrival_us
    DoorUp.objects.update(until_us=heard_us + 600 * S)
    assert judge_silence(heard_us + 2 * S) == []

    # Three intervals of silence are shown; the experiment's 30 s call its owner, once.
    judge_silence(heard_us + 5 * S)
    assert Alarm.objects.get().kind == "no-reading" and not Message.objects.exists()
    for after_s in (31, 32, 60):
        judge_silence(heard_us + after_s * S)
    tell_task()
    (sent,) = mail.outbox
    assert sent.subject == "alarm: b08/eom-in: no reading for 31 s"

    # A reading comes: the alarm has returned and waits to be acknowledged.
    story.send(story.batch(10, 1))
    judge_silence(now_us())
    assert Alarm.objects.get().state == "returned-unacknowledged"


@pytest.mark.parametrize(("why", "columns"), [
    ("dark", {"port1": [0.2 * FLOOR_W] * 20, "port2": [0.5 * FLOOR_W] * 20}),
    ("saturated", {"clipped": [True] * 20}),
])
def test_a_reading_that_cannot_be_trusted_never_raises_an_er_alarm(story, why, columns):
    # By its numbers alone the light would be far below the limit for twenty seconds.
    story.send(story.batch(0, 20, er_db=10.0, **columns))
    story.sweep()

    # It is stored and shown with the reason, and raises nothing.
    sample = TapNow.objects.get(tap=story.tap).sample
    assert sample["er_db"] is None and sample["trust_by_quantity"]["er_db"]["codes"] == [why]
    assert story.stored() == list(range(20))
    assert not Alarm.objects.exists()

    # The same numbers from a working detector do.
    story.send(story.batch(20, 10, er_db=10.0))
    story.sweep()
    assert Alarm.objects.get().kind == "limit"
