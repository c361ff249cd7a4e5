"""A bench client before a real door: in this process for its parts, as processes of their own for the whole."""

import json
import subprocess
import sys
import threading
from pathlib import Path

import pytest
from labmon_bench.door import DoorAnswer, DoorAway
from labmon_bench.reading import Reading
from labmon_bench.sender import Sender as BenchSender
from labmon_bench.store import Store

from tests.ingest.conftest import Sender, sender  # noqa: F401  the fixture of the door's own tests
from tests.ingest.door.test_over_uvicorn import free_port, server

ROOT = Path(__file__).resolve().parents[3]
ONE_FILE = ROOT / "clients" / "bench" / "one_file" / "labmon_bench.py"
START_US = 1_930_356_665_000_000
GENEROUS = 1 << 30


class NearDoor:
    """The real door behind the face of the client's connection; ``faults`` says what becomes of the next attempts."""

    def __init__(self, station: Sender) -> None:
        self.station = station
        self.faults: list[str] = []
        self.posted: list[int] = []

    def post(self, content, headers, key) -> DoorAnswer:
        fault = self.faults.pop(0) if self.faults else ""
        if fault == "away":
            raise DoorAway("nobody listens")
        self.posted.append(len(content))
        response = self.station.post(content, headers={**headers, "Authorization": f"Bearer {key}"})
        if fault == "answer lost":
            raise DoorAway("the line broke behind the commit")
        return DoorAnswer(response.status_code, response.json(), "", float(response.headers.get("retry-after", 0)))

    def close(self) -> None:
        pass


@pytest.fixture
def door(sender):  # noqa: F811
    return NearDoor(sender)


@pytest.fixture
def store(tmp_path):
    made = Store(tmp_path / "bench.spool", GENEROUS)
    yield made
    made.close()


@pytest.fixture
def bench_sender(store, door, sender):  # noqa: F811
    """Sends from the store to the real door."""
    return BenchSender(store, door, lambda: sender.key, 0.5, seed=1)


def readings(count, first=0, tap="eom-in", **more):
    """Readings a second apart with values that tell their number."""
    return [Reading(tap, START_US + 1_000_000 * number, 1000 * number, {"port1": 1e-3 + 1e-9 * number, "port2": 1e-6}, **more)
            for number in range(first, first + count)]


def send_all(bench_sender, turns=100):
    """Turns until nothing waits; how many."""
    for turn in range(turns):
        if not bench_sender.store.waiting:
            return turn
        bench_sender.turn()
    raise AssertionError(f"{bench_sender.store.waiting} wait after {turns} turns: {bench_sender.tally.trouble}")


def write_settings(folder, port, key, tap_lines, **bench):
    """A settings file for a door on this machine."""
    (folder / "station.key").write_text(key + "\n")
    lines = ["[bench]", f"door = http://127.0.0.1:{port}", "key_file = station.key", "send_every_s = 0.05",
             *(f"{name} = {value}" for name, value in bench.items()), *tap_lines]
    path = folder / "bench.ini"
    path.write_text("\n".join(lines) + "\n")
    return path


def client(*words, **options):
    """The one file, as a bench PC runs it: without anything else of ours in reach."""
    stdin = options.pop("stdin", subprocess.DEVNULL)
    return subprocess.Popen([sys.executable, "-I", str(ONE_FILE), *map(str, words)], stdin=stdin, stdout=subprocess.PIPE,
                            stderr=subprocess.PIPE, text=True, **options)


def status_of(settings):
    """The client's status file."""
    return json.loads((settings.parent / "bench.spool.status.json").read_text())


__all__ = ["BenchSender", "free_port", "server", "threading"]
