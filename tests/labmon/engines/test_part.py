"""A part that ends is started again, after growing pauses."""

from types import SimpleNamespace

import pytest

from labmon.engines.faults import EngineFault
from labmon.engines.part import FIRST_PAUSE_S, LONGEST_PAUSE_S, STEADY_AFTER_S, Watch


class FakePart:
    """Ends when told; may refuse to start."""

    name = "web"

    def __init__(self):
        self.process = SimpleNamespace(poll=lambda: self.status, returncode=1)
        self.status = None
        self.starts = 0
        self.is_refusing = False

    def start(self):
        self.starts += 1
        if self.is_refusing:
            raise EngineFault("no")
        self.status = None


@pytest.fixture
def lab():
    now = SimpleNamespace(s=0.0, said=[])
    part = FakePart()
    watch = Watch(part, lambda who, what: now.said.append(what), clock=lambda: now.s)
    return SimpleNamespace(now=now, part=part, watch=watch)


def pauses_of(lab, count, ran_s=0.0):
    """Let it end ``count`` times after ``ran_s`` and measure how long each pause is."""
    found = []
    for _ in range(count):
        lab.now.s += ran_s
        lab.part.status = 1
        ended_s, starts = lab.now.s, lab.part.starts
        while lab.part.starts == starts:
            lab.watch.look()
            lab.now.s += 0.125
        found.append(lab.now.s - 0.125 - ended_s)
    return found


def test_pauses_double_up_to_the_longest(lab):
    assert pauses_of(lab, 8) == [0.5, 1, 2, 4, 8, 16, 30, 30]
    assert LONGEST_PAUSE_S == 30


def test_pause_is_short_again_after_a_steady_run(lab):
    pauses_of(lab, 4)
    assert pauses_of(lab, 1, ran_s=STEADY_AFTER_S) == [FIRST_PAUSE_S]


def test_running_part_is_left_alone(lab):
    for _ in range(10):
        lab.watch.look()
    assert lab.part.starts == 0 and lab.now.said == []


def test_start_that_fails_is_tried_again(lab):
    lab.part.is_refusing = True
    pauses_of(lab, 1)
    lab.part.is_refusing = False
    lab.now.s += 1.0
    lab.watch.look()
    assert lab.part.starts == 2
    assert lab.now.said[-1] == "started again"
