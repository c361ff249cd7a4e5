"""The whole client, as the one file in a process of its own, before the real door: killed at any moment, nothing lost, nothing
doubled."""

import json
import random
import shutil
import signal
import subprocess
import threading
import time
from datetime import UTC, datetime
from pathlib import Path

import pytest

from ingest.models import SetAside, StationBoot
from tests.clients.bench.conftest import ONE_FILE, client, free_port, server, status_of, write_settings
from tests.faults.figures import balance_of, note_fault
from tests.running_lab import until_true

PORTS = """
import pathlib
made = pathlib.Path(__file__).with_name("made.txt")
def read_ports():
    number = len(made.read_text().splitlines()) if made.exists() else 0
    with made.open("a") as file:
        file.write("x\\n")
    return {"port1": number, "port2": 0.5}
"""
TAPS = ["[tap eom-in]", "source = function", "function = ports.py:read_ports", "read_every_s = 0.02",
        "[tap adc]", "source = csv", "file = log.csv", "begin = start", "time = Time", "columns =", "  port1: A", "  port2: B",
        "read_every_s = 0.05"]


class Logger(threading.Thread):
    """Another program that writes a file, and begins a new one now and then."""

    def __init__(self, folder):
        super().__init__(daemon=True)
        self.file, self.count, self.stop = folder / "log.csv", 0, threading.Event()
        self.file.write_text("Time,A,B\n")

    def run(self):
        while not self.stop.wait(0.01):
            stamp = datetime.now(UTC).isoformat()
            with self.file.open("a") as file:
                file.write(f"{stamp},{self.count},1\n")
            self.count += 1
            if self.count % 150 == 0:
                self.file.rename(self.file.with_name(f"log.csv.{self.count // 150}"))
                self.file.write_text("Time,A,B\n")


def killed_course(sender, tmp_path, lives, seed):
    """Lives of the client ended by kill -9, the door killed in every third; then one life that may finish."""
    chance = random.Random(seed)
    port = free_port()
    (tmp_path / "ports.py").write_text(PORTS)
    settings = write_settings(tmp_path, port, sender.key, TAPS)
    logger = Logger(tmp_path)
    client_that_looks = client("run", settings)
    assert until_true(lambda: (tmp_path / "bench.spool.status.json").exists(), 20.0)
    client_that_looks.kill()
    client_that_looks.communicate()
    logger.start()
    life = 1
    while life < lives:
        with server(port) as door:
            for turn in range(3):
                process = client("run", settings)
                time.sleep(chance.uniform(0.5, 1.5))
                if turn == 2:
                    door.kill()
                    time.sleep(chance.uniform(0.0, 0.3))
                process.kill()
                process.communicate()
                life += 1
    logger.stop.set()
    logger.join()
    with server(port):
        process = client("run", settings)
        assert until_true(lambda: is_drained(settings, process), 60.0), status_of(settings)
        process.send_signal(signal.SIGTERM)
        _, said = process.communicate(timeout=20)
        assert process.returncode == 0, said
    return logger, status_of(settings)


def is_drained(settings, process):
    status = status_of(settings) if (settings.parent / "bench.spool.status.json").exists() else {"process": 0}
    return status["process"] == process.pid and status["stored"] > 0 and status["waiting"] < 20


def judge(sender, tmp_path, lives, logger, status):
    """Every row of the file once, every call of the function once but those in hand when the process was killed."""
    assert status["waiting"] == 0
    rows = [int(value) for value in sender.stored("adc").column("port1").tolist()]
    assert sorted(rows) == list(range(logger.count)) and logger.count > 50
    made = len((tmp_path / "made.txt").read_text().splitlines())
    calls = [int(value) for value in sender.stored().column("port1").tolist()]
    assert len(set(calls)) == len(calls)
    lost = set(range(made)) - set(calls)
    assert len(lost) <= lives + 1, "only a reading that was just being taken may go with its process"
    assert SetAside.objects.count() == 0 and status["dropped"] == 0
    assert lives / 2 < status["restarts"] <= lives, "on a busy machine a life may end before it has opened its spool"
    assert StationBoot.objects.filter(is_server_timed=True).count() == 0
    return {"rows": len(rows), "calls": made, "in hand when killed": len(lost)}


def test_killed_twice_and_the_door_once(sender, tmp_path):
    logger, status = killed_course(sender, tmp_path, 4, 1)
    print(judge(sender, tmp_path, 4, logger, status))


@pytest.mark.slow
@pytest.mark.parametrize("seed", [2, 3])
def test_killed_many_times(sender, tmp_path, seed):
    logger, status = killed_course(sender, tmp_path, 19, seed)
    counted = judge(sender, tmp_path, 19, logger, status)
    rows = [int(value) for value in sender.stored("adc").column("port1").tolist()]
    note_fault("bench client kill -9", "19 lives, and the door killed in every third", balance_of(range(logger.count), rows),
               recovered="by the next life",
               also=f"rows of a followed file; of {counted['calls']} calls of a function "
               f"{counted['in hand when killed']} were in hand when killed")


def test_a_pipe_that_ends_is_sent_to_its_end(sender, tmp_path):
    """``measure | labmon_bench.py run``: the client ends by itself once all is acknowledged."""
    port = free_port()
    settings = write_settings(tmp_path, port, sender.key, ["[tap eom-in]", "source = stdin", "columns = port1 port2"])
    with server(port):
        process = client("run", settings, stdin=-1)
        _, said = process.communicate("".join(f"{number} 0.5\n" for number in range(500)), timeout=30)
    assert process.returncode == 0, said
    assert sender.stored().column("port1").tolist() == list(range(500))
    assert sender.tap().unknown_columns == []


@pytest.mark.parametrize("version", ["3.9", "3.13"])
def test_it_runs_on_the_oldest_and_a_new_python(sender, tmp_path, version):
    """The whole way on another interpreter, without anything installed for it."""
    interpreter = python_of(version)
    if interpreter is None:
        pytest.skip(f"no Python {version} on this machine; vermin judges the source in test_one_file.py")
    port = free_port()
    settings = write_settings(tmp_path, port, sender.key, ["[tap eom-in]", "source = stdin", "columns = port1 port2"])
    with server(port):
        process = subprocess.Popen([interpreter, "-I", "-S", ONE_FILE, "run", settings], stdin=subprocess.PIPE, text=True,
                                   stdout=subprocess.PIPE, stderr=subprocess.PIPE)
        _, said = process.communicate("".join(f"{number} 0.5\n" for number in range(100)), timeout=30)
    assert process.returncode == 0, said
    assert sender.stored().column("port1").tolist() == list(range(100))


def python_of(version: str) -> str | None:
    """An interpreter of that version: kept by pyenv (whose own names on the path may lead nowhere), or on the path."""
    kept = sorted((Path.home() / ".pyenv" / "versions").glob(f"{version}.*/bin/python"))
    return str(kept[-1]) if kept else shutil.which(f"python{version}")


def test_status_says_what_is_wrong(sender, tmp_path):
    """No door: the client runs on, and a person can see why nothing arrives."""
    settings = write_settings(tmp_path, free_port(), sender.key, ["[tap eom-in]", "source = function",
                                                                  "function = none.py:read", "[tap adc]", "source = stdin",
                                                                  "columns = port1 port2"], log_file="bench.log")
    process = client("run", settings, stdin=-1)
    process.stdin.write("1 2\n")
    process.stdin.flush()
    log = tmp_path / "bench.log"
    assert until_true(lambda: log.exists() and "nobody listens" in log.read_text(), 20)
    assert until_true(lambda: (settings.parent / "bench.spool.status.json").exists() and status_of(settings)["door_trouble"], 20)
    seen = client("status", settings).communicate(timeout=20)[0]
    assert "1 readings wait" in seen and "door: nobody listens" in seen
    assert "tap eom-in: mute: " in seen and "none.py is not there" in seen
    _, said = client("run", settings).communicate(timeout=20)
    assert "another client is running" in said
    process.send_signal(signal.SIGTERM)
    process.communicate(timeout=20)
    assert process.returncode == 0 and json.loads((tmp_path / "bench.spool.status.json").read_text())["waiting"] == 1
