"""The door in a real server: kept connections, a killed process, a clean stop."""

import os
import signal
import socket
import subprocess
import sys
import threading
import time
from contextlib import contextmanager

import httpx
import pytest
from django.db import connection

from tests.ingest.conftest import two_port

SERVE = (
    "import django; django.setup(); import uvicorn; from ingest.door.asgi import DoorApplication; "
    "uvicorn.run(DoorApplication(), port={port}, log_level='warning')"
)


SERVE_ALL = (
    "import uvicorn; "
    "uvicorn.run('labmon.asgi:application', port={port}, log_level='warning', ws_per_message_deflate=False)"
)


@contextmanager
def server(port, what="the door"):
    """The door, or the whole of ``labmon.asgi``, in a process of its own, on the test database."""
    program = SERVE_ALL if what == "labmon.asgi" else SERVE
    settings = connection.settings_dict
    url = f"postgresql://{settings['USER']}:{settings['PASSWORD']}@/{settings['NAME']}?host={settings['HOST']}&port={settings['PORT']}"
    process = subprocess.Popen(
        [sys.executable, "-c", program.format(port=port)],
        env=os.environ | {"LABMON_DATABASE_URL": url, "DJANGO_SETTINGS_MODULE": "labmon.settings", "LABMON_LOG_LEVEL": "ERROR"},
    )
    try:
        for _ in range(200):
            with socket.socket() as probe:
                if probe.connect_ex(("127.0.0.1", port)) == 0:
                    break
            time.sleep(0.05)
        yield process
    finally:
        process.kill()
        process.wait(10)


def free_port():
    """A port nobody has now."""
    with socket.create_server(("127.0.0.1", 0)) as taken:
        return taken.getsockname()[1]


@pytest.fixture
def port():
    return free_port()


def client(port, key):
    return httpx.Client(base_url=f"http://127.0.0.1:{port}", headers={"Authorization": f"Bearer {key}"}, timeout=20)


def test_a_kept_connection_goes_on_after_refusals(sender, port):
    with server(port), client(port, sender.key) as station:
        assert station.post("/", json=two_port(0, 5)).json()["stored"] == 5
        assert station.post("/", content=b"{").status_code == 400
        assert station.post("/", json=two_port(), headers={"Authorization": "Bearer x"}).status_code == 401
        assert station.post("/", content=b" " * (9 << 20)).status_code == 413
        assert station.post("/", json=two_port(0, 6)).json()["known"] == 5
    assert len(sender.stored()) == 6


def test_a_clean_stop_answers_what_it_took(sender, port):
    statuses = []

    def send_on(station):
        try:
            for number in range(10_000):
                statuses.append((number, station.post("/", json=two_port(number)).status_code))
        except httpx.HTTPError:
            return

    with server(port) as process, client(port, sender.key) as station:
        thread = threading.Thread(target=send_on, args=(station,))
        thread.start()
        while len(statuses) < 20:
            time.sleep(0.01)
        process.send_signal(signal.SIGTERM)
        assert process.wait(15) in (0, -signal.SIGTERM)
        thread.join(20)
    good = [number for number, status in statuses if status == 200]
    assert set(good) <= set(sender.stored().sequence.tolist()) and len(good) >= 20


@pytest.mark.slow
def test_killed_at_any_moment_nothing_acknowledged_is_lost_or_doubled(sender, port):
    """Promise 1: a sender that repeats what was not acknowledged ends with exactly its readings, once each."""
    number, acknowledged = 0, 0
    for life in range(8):
        with server(port) as process, client(port, sender.key) as station:
            killer = threading.Timer(0.3 + 0.11 * life, process.kill)
            killer.start()
            try:
                while True:
                    answer = station.post("/", json=two_port(number * 10, 10)).json()
                    assert answer["stored"] + answer["known"] == 10
                    acknowledged += 10
                    number += 1
            except httpx.HTTPError:
                killer.join()
    with server(port), client(port, sender.key) as station:
        station.post("/", json=two_port(number * 10, 10))
    stored = sender.stored()
    assert acknowledged > 100 and stored.sequence.tolist() == list(range(len(stored))) and len(stored) == acknowledged + 10
