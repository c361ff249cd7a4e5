"""Every batch twenty times at once, over twenty connections and two web processes: each reading is stored once."""

import http.client
import json
import random
import subprocess
import sys
import threading
import time

import pytest

from tests.faults.bench import await_judged, make_taps, told_of
from tests.faults.course import stokes_course, two_port_course
from tests.faults.figures import note_fault
from tests.faults.history import balances, calls_of, episodes_by_fold, let_limits_hold_since
from tests.faults.sender import PATH, HonestSender
from tests.running_lab import PROJECT, clean_environ, free_port, until_true

pytestmark = pytest.mark.slow

TIMES = 20
STEP_US = 10_000
#: The course lies so far back that nobody is called.
AGO_S = 600


@pytest.fixture
def second_port(lab):
    """Another web process of the same lab, on a port of its own."""
    port = free_port()
    process = subprocess.Popen([sys.executable, "-m", "labmon.web", "--port", str(port)], cwd=PROJECT,
                               env=clean_environ(LABMON_DATA=str(lab.folder)), stdin=subprocess.DEVNULL,
                               stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    try:
        assert until_true(lambda: _answers(port), 90.0)
        yield port
    finally:
        process.terminate()
        process.wait(20)


def _answers(port):
    connection = http.client.HTTPConnection("127.0.0.1", port, timeout=5)
    try:
        connection.request("GET", "/health/services")
        return connection.getresponse().status == 200
    except OSError:
        return False
    finally:
        connection.close()


class Lane(threading.Thread):
    """One connection that sends every body: together with the other lanes, or in an order and cut of its own."""

    def __init__(self, port, key, bodies, gate):
        super().__init__(daemon=True)
        self.connection = http.client.HTTPConnection("127.0.0.1", port, timeout=60)
        self.key, self.bodies, self.gate = key, bodies, gate
        self.stored = self.known = self.readings = self.waits = 0
        self.bad = []

    def run(self):
        for body, count in self.bodies:
            self.gate.wait()
            self.readings += count
            while not self._is_sent(body):
                self.waits += 1
                time.sleep(0.2)
        self.connection.close()

    def _is_sent(self, body):
        self.connection.request("POST", PATH, body, {"Authorization": f"Bearer {self.key}", "Content-Type": "application/json"})
        answer = self.connection.getresponse()
        said = answer.read()
        if answer.status == 200:
            found = json.loads(said)
            self.stored, self.known = self.stored + found["stored"], self.known + found["known"]
        elif answer.status not in (429, 503):
            self.bad.append((answer.status, said[:300]))
        return answer.status not in (429, 503)


class NoGate:
    """Nobody waits for the others."""

    def wait(self):
        pass


def _cut(sender, generator):
    """The course as bodies, in an order and with cuts that the generator chooses."""
    numbers, bodies = list(range(len(sender.course))), []
    while numbers:
        count = generator.randint(1, 200)
        bodies.append((json.dumps(sender._message(numbers[:count])).encode(), min(count, len(numbers))))
        numbers = numbers[count:]
    generator.shuffle(bodies)
    return bodies


@pytest.mark.parametrize("is_together", [True, False], ids=["the same batches at once", "each cut and ordered in its own way"])
def test_twenty_fold_storm(lab, visitor, second_port, is_together):
    courses = two_port_course(1, step_us=STEP_US), stokes_course(2, step_us=STEP_US)
    taps = make_taps(visitor, f"storm{int(is_together)}", courses, STEP_US / 1e6)
    started_us = (time.time_ns() // 1_000_000_000 - AGO_S) * 1_000_000
    let_limits_hold_since(lab, taps, started_us - 60_000_000)
    senders = [HonestSender(port=lab.port, key=tap.key, tap=tap.name, course=tap.course, started_us=started_us, seed=81 + number)
               for number, tap in enumerate(taps)]
    lanes = []
    for sender in senders:
        gate = threading.Barrier(TIMES, timeout=120) if is_together else NoGate()
        for number in range(TIMES):
            bodies = _cut(sender, random.Random(1 if is_together else number))
            lanes.append(Lane(second_port if number % 2 else lab.port, sender.key, bodies, gate))
    began_s = time.monotonic()
    for lane in lanes:
        lane.start()
    for lane in lanes:
        lane.join(120)
        assert not lane.is_alive() and lane.bad == []
    took_s, judged_s = time.monotonic() - began_s, await_judged(lab)
    total = balances(visitor, taps, senders)
    for tap, sender in zip(taps, senders, strict=True):
        assert [episode[:3] for episode in told_of(visitor, tap, sender).episodes] == episodes_by_fold(tap, STEP_US / 1e6)
    calls = [call for call in calls_of(lab, taps) if call[1] == "limit"]  # the silence behind the storm is of now, and may call
    sent = sum(lane.readings for lane in lanes)
    note_fault("duplicate storm", f"every reading sent {TIMES} times over {TIMES} connections a station to 2 web processes, "
               + ("the same batch at once" if is_together else "each lane cut and ordered in its own way"), total,
               calls=f"{len(calls)} of 4 episodes", recovered=f"judged {judged_s:.1f} s after the last answer",
               also=f"{sent:,} readings in {sum(len(lane.bodies) for lane in lanes):,} requests in {took_s:.1f} s; answered as "
               f"stored {sum(lane.stored for lane in lanes):,}, as known {sum(lane.known for lane in lanes):,}")
    assert total.is_exact and calls == []
    assert sum(lane.stored for lane in lanes) == total.sent, "each reading is answered as stored once"
    assert sum(lane.known for lane in lanes) == (TIMES - 1) * total.sent == sent - total.sent
