"""The broker carries hints only: without it readings are acknowledged as before, and judged when it is back.

``LABMON_TEST_BROKER_AWAY_S`` says for how long it is away (12); 600 makes the ten minutes of the fault table.
"""

import os
import shutil
import signal
import tempfile
import time
from pathlib import Path

import numpy as np
import pytest

from labmon.engines.folder import DataFolder
from labmon.engines.valkey import EmbeddedValkey
from tests.faults.bench import (
    LONGEST_RUN_S,
    await_all_sent,
    await_judged,
    expected_readings,
    make_taps,
    start_senders,
    told_of,
    visitor_of,
)
from tests.faults.course import DURATION_S, EPISODES, SEGMENTS, stokes_course, two_port_course
from tests.faults.figures import note_fault
from tests.faults.history import balances, calls_of
from tests.running_lab import RunningLab, clean_environ

pytestmark = pytest.mark.slow

CALM_S, SHORTEST_AWAY_S = 10.0, 12.0
AWAY_S = max(float(os.environ.get("LABMON_TEST_BROKER_AWAY_S", SHORTEST_AWAY_S)), SHORTEST_AWAY_S)
#: The light after the usual course is calm, as long as the broker is away for longer.
CALM_AFTER_S = round(AWAY_S - SHORTEST_AWAY_S)
COURSE = (*SEGMENTS, (30.0, CALM_AFTER_S)) if CALM_AFTER_S else SEGMENTS


@pytest.fixture(scope="module")
def broker():
    """A broker of the test's own, which it may stop and start."""
    parent = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    folder = DataFolder(parent / "d")
    folder.make()
    folder.hold()
    engine = EmbeddedValkey(folder)
    engine.start()
    yield engine
    engine.stop()
    folder.release()
    shutil.rmtree(parent)


@pytest.fixture(scope="module")
def lab_with(broker):
    """A lab that uses it."""
    parent = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    with RunningLab(parent / "lab", environ=clean_environ(LABMON_BROKER_URL=broker.url)) as running:
        running.await_ready()
        yield running
        running.stop()
    shutil.rmtree(parent)


@pytest.fixture(scope="module")
def visitor_with(lab_with):
    return visitor_of(lab_with)


def _stopped(broker):
    broker.stop()
    return broker.start


def _hanging(broker):
    broker.process.send_signal(signal.SIGSTOP)
    return lambda: broker.process.send_signal(signal.SIGCONT)


@pytest.mark.parametrize("go_away", [_stopped, _hanging], ids=["stopped", "hanging"])
def test_reception_does_not_feel_it_and_judgement_catches_up(broker, lab_with, visitor_with, go_away, capsys):
    taps = make_taps(visitor_with, go_away.__name__.strip("_"), (two_port_course(1, COURSE), stokes_course(2, COURSE)))
    senders = start_senders(lab_with, taps, seed=21)
    time.sleep(CALM_S)
    away_from_s = time.monotonic()
    come_back = go_away(broker)
    write_s = _write_time(visitor_with, taps)
    time.sleep(max(away_from_s + AWAY_S - time.monotonic(), 0.0))
    come_back()
    away_until_s = time.monotonic()
    await_all_sent(senders, LONGEST_RUN_S + CALM_AFTER_S)
    judged_s = await_judged(lab_with)
    calm_s, away_s = _answer_times(senders, 0.0, away_from_s), _answer_times(senders, away_from_s, away_until_s)
    with capsys.disabled():
        print(f"\n[broker {go_away.__name__.strip('_')}] answer took {_words(calm_s)} before, {_words(away_s)} while away; "
              f"a person's write took {write_s:.2f} s then; judged {judged_s:.1f} s after the last acknowledgement")
    total = balances(visitor_with, taps, senders)
    note_fault(f"broker {go_away.__name__.strip('_')}", f"for {AWAY_S:.0f} s of {DURATION_S + CALM_AFTER_S} s of sending", total,
               calls=len(calls_of(lab_with, taps)),
               recovered=f"reception did not feel it; judged {judged_s:.1f} s after the last acknowledgement",
               also=f"answer took {_words(calm_s)} before, {_words(away_s)} while away")
    for tap, sender in zip(taps, senders, strict=True):
        assert sender.tally.unanswered == sender.tally.told_to_wait == 0
        told = told_of(visitor_with, tap, sender)
        assert told.readings == expected_readings(sender)
        assert [episode[:4] for episode in told.episodes] == list(EPISODES)
    assert len(away_s) > AWAY_S
    assert np.median(away_s) < 2 * np.median(calm_s) + 0.05
    assert write_s < 4.0
    assert max(away_s) < 2.0, "a wait for the broker is longer than that (socket_connect_timeout)"


def _write_time(visitor, taps):
    """How long a manager waits for a new experiment, s: a write that open pages are told of."""
    began_s = time.monotonic()
    visitor.call("POST", "experiments", {"name": f"{taps[0].station} meanwhile", "taps": [taps[0].path]})
    return time.monotonic() - began_s


def _answer_times(senders, from_s, until_s):
    return [took_s for sender in senders for at_s, took_s in sender.tally.acknowledged_s if from_s <= at_s < until_s]


def _words(times_s):
    return f"{1e3 * np.median(times_s):.0f} ms (longest {1e3 * max(times_s):.0f} ms, {len(times_s)} batches)"
