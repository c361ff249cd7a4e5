"""The network was cut for ten minutes, then everything comes at once: nothing lost, nobody called for the past, pages usable.

The ten minutes are those of the data: the course begins ten minutes ago, and nobody waits for it.
"""

import re
import threading
import time

import httpx
import numpy as np
import pytest

from tests.faults.bench import await_all_sent, await_judged, make_taps, start_senders, told_of
from tests.faults.course import stokes_course, two_port_course
from tests.faults.figures import note_fault
from tests.faults.history import balances, calls_of, episodes_by_fold, let_limits_hold_since
from tests.faults.line import Line

pytestmark = pytest.mark.slow

STEP_US, AWAY_S, LIVE_S = 100_000, 600, 12
#: Both excursions are over when the line is mended.
OVER = ((30.0, 120), (18.0, 30), (30.0, 200), (18.0, 60), (30.0, AWAY_S + LIVE_S - 410))
#: The second excursion begins a minute before the line is mended and lasts.
OPEN = ((30.0, 120), (18.0, 30), (30.0, AWAY_S - 210), (18.0, 60 + LIVE_S))


class Reader(threading.Thread):
    """A signed-in person who looks at pages without pause; (page, status, s) of each look."""

    def __init__(self, lab, pages):
        super().__init__(daemon=True)
        self.pages, self.looks, self.is_over = pages, [], threading.Event()
        self.browser = httpx.Client(base_url=f"http://127.0.0.1:{lab.port}", timeout=30.0)
        self.browser.get("/login/")
        if "Sign in as" not in lab.said:
            lab.read_until("Sign in as")
        name, password = re.search(r"Sign in as (\S+) with the password (\S+)", lab.said).groups()
        form = {"username": name, "password": password, "csrfmiddlewaretoken": self.browser.cookies["csrftoken"]}
        answer = self.browser.post("/login/", data=form, headers={"Origin": f"http://127.0.0.1:{lab.port}"})
        assert answer.status_code == 302, answer.text[:300]

    def run(self):
        while not self.is_over.is_set():
            for page in self.pages:
                began_s = time.monotonic()
                status = self.browser.get(page).status_code
                self.looks.append((page, status, time.monotonic() - began_s))
            self.is_over.wait(0.1)

    def words(self):
        took = {page: [1e3 * took_s for one, _, took_s in self.looks if one == page] for page in self.pages}
        return "; ".join(f"GET {page} {np.median(times):.0f} ms (longest {max(times):.0f}, {len(times)} times)"
                         for page, times in took.items())


def test_ten_minutes_without_network_then_a_flood(lab, visitor, capsys):
    taps = [tap for name, segments in (("flood1", OVER), ("flood2", OVER), ("flood3", OPEN)) for tap in make_taps(
        visitor, name, (two_port_course(3, segments, STEP_US), stokes_course(4, segments, STEP_US)), STEP_US / 1e6)]
    line = Line(lab.port)
    reader = Reader(lab, ["/", "/stations/flood1-a/"])
    started_us = (time.time_ns() // 1_000_000_000 - AWAY_S) * 1_000_000
    let_limits_hold_since(lab, taps, started_us - 60_000_000)
    senders = start_senders(lab, taps, seed=41, started_us=started_us, port=line.port, most=400, pause_s=0.02)
    time.sleep(0.3)
    line.cut()
    waiting = sum(len(sender.waiting) for sender in senders)
    time.sleep(2.0)
    assert waiting > 20_000 and sum(sender.tally.unanswered for sender in senders) > 0
    line.mend()
    mended_s = time.monotonic()
    reader.start()
    assert await_flood(senders, 60.0)
    flood_s = time.monotonic() - mended_s
    await_all_sent(senders, 60.0)
    judged_s = await_judged(lab)
    reader.is_over.set()
    reader.join()
    reader.browser.close()
    line.cut()
    total = balances(visitor, taps, senders)
    for tap, sender in zip(taps, senders, strict=True):
        told = told_of(visitor, tap, sender)
        assert [episode[:3] for episode in told.episodes] == episodes_by_fold(tap, STEP_US / 1e6), tap
        assert len(told.episodes) == 2
    calls = calls_of(lab, taps)
    note_fault("network cut 10 minutes, then flood", f"line cut while 6 stations of 10 Hz sent; {waiting:,} readings waited",
               total, calls=f"{len(calls)} of 12 episodes; 2 still open", recovered=f"backlog in {flood_s:.1f} s, judged "
               f"{judged_s:.1f} s after the last reading", also=reader.words())
    assert total.is_exact
    assert {status for _, status, _ in reader.looks} == {200}
    assert sorted(calls) == [("flood3-a/in", "limit", False), ("flood3-b/out", "limit", False)], "only what is still open calls"


def await_flood(senders, within_s):
    """Until no sender has more than two seconds of its readings left to send."""
    until_s = time.monotonic() + within_s
    while time.monotonic() < until_s:
        if all(len(sender.waiting) < 20 for sender in senders):
            return True
        time.sleep(0.02)
    return False
