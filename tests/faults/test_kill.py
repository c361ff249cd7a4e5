"""kill -9 in the middle of a stream: each reading once, unchanged, and the episodes of an undisturbed run (CONTRACT 5).

Kills, waits and lost answers follow a seed; the senders are honest. Calls and mails may differ and are not compared.
"""

import os
import random
import shutil
import signal
import tempfile
import time
from pathlib import Path

import pytest

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
from tests.faults.course import DURATION_S, EPISODES
from tests.faults.figures import note_fault
from tests.faults.history import balances, calls_of, longest_wait_s
from tests.running_lab import RunningLab, processes_of, until_true

pytestmark = pytest.mark.slow

WORDS = {"web": "labmon.web", "worker": "labmon.worker prompt", "long worker": "labmon.worker long",
         "beat": "celery -A labmon beat", "database": "bin/postgres", "broker": "valkey-server"}
BACK_WITHIN_S = 40.0
#: No kill in the first and the last seconds of the course.
MARGIN_S = 4.0
#: In the middle of the first excursion, its alarm just raised.
CUT_AT_S = 14.6


def test_undisturbed_run_has_the_episodes_worked_out_by_hand(undisturbed):
    for told in undisturbed:
        assert [episode[:4] for episode in told.episodes] == list(EPISODES)


@pytest.mark.parametrize(("victims", "seed"), [
    (("web", "web", "web"), 11),
    (("worker", "worker", "long worker", "beat", "broker"), 12),
    (("database", "database"), 13),
    (("web", "worker", "beat", "database", "broker"), 15),
], ids=lambda value: "+".join(value) if isinstance(value, tuple) else str(value))
def test_killed_parts_lose_nothing_and_change_no_episode(lab, visitor, undisturbed, victims, seed, capsys):
    generator = random.Random(seed)
    taps = make_taps(visitor, f"run{seed}")
    senders = start_senders(lab, taps, seed=seed, lost_share=0.1, newest_share=0.15)
    killed = _kill_at_random(lab, victims, generator)
    await_all_sent(senders, LONGEST_RUN_S)
    assert until_true(lambda: lab.status("/health/services") == 200, BACK_WITHIN_S)
    judged_s = await_judged(lab)
    for tap, sender, calm in zip(taps, senders, undisturbed, strict=True):
        told = told_of(visitor, tap, sender)
        assert told.readings == expected_readings(sender)
        assert told.episodes == calm.episodes
    note_fault("kill -9: " + ", ".join(victims), "at seeded moments of 40 s of sending",
               balances(visitor, taps, senders),
               calls=len(calls_of(lab, taps)), recovered=_recovery(senders, judged_s))
    _print_figures(capsys, killed, senders, judged_s)
    assert sum(sender.tally.known for sender in senders) > 0, "no reading was ever sent twice: the run shows nothing"
    assert _workers(lab) <= 3, processes_of(lab.folder)


def test_killed_supervisor_takes_all_down_and_the_next_start_goes_on(capsys):
    """As when the machine is switched off and on again: a second lab on the same folder, the senders still at work."""
    folder = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    with RunningLab(folder / "lab") as first:
        first.await_ready()
        taps = make_taps(visitor_of(first), "cut")
        senders = start_senders(first, taps, seed=31, lost_share=0.1)
        time.sleep(CUT_AT_S)
        first.process.kill()
        assert until_true(lambda: processes_of(folder / "lab") == [], BACK_WITHIN_S), processes_of(folder / "lab")
    with RunningLab(folder / "lab") as second:
        for sender in senders:
            sender.port = second.port
        second.await_ready()
        await_all_sent(senders, LONGEST_RUN_S)
        judged_s = await_judged(second)
        watcher = visitor_of(second, "second-watcher")
        for tap, sender in zip(taps, senders, strict=True):
            told = told_of(watcher, tap, sender)
            assert told.readings == expected_readings(sender)
            assert [episode[:4] for episode in told.episodes] == list(EPISODES)
        note_fault("kill -9: supervisor, and all with it", "lab started anew on its folder",
                   balances(watcher, taps, senders),
                   calls=len(calls_of(second, taps)), recovered=_recovery(senders, judged_s))
        second.stop()
    _print_figures(capsys, [f"supervisor {CUT_AT_S} s"], senders, judged_s)
    shutil.rmtree(folder)


def _kill_at_random(lab, victims, generator):
    """kill -9 each victim at a moment of the course; names and moments, s."""
    began_s = time.monotonic()
    moments = sorted(generator.uniform(MARGIN_S, DURATION_S - MARGIN_S) for _ in victims)
    order = generator.sample(victims, len(victims))
    killed = []
    for moment_s, victim in zip(moments, order, strict=True):
        time.sleep(max(began_s + moment_s - time.monotonic(), 0.0))
        assert until_true(lambda words=WORDS[victim]: any(words in line for line in processes_of(lab.folder)), BACK_WITHIN_S)
        os.kill(lab.pid_of(WORDS[victim]), signal.SIGKILL)
        killed.append(f"{victim} {time.monotonic() - began_s:.1f} s")
    return killed


def _recovery(senders, judged_s):
    return (f"longest time between two acknowledgements {max(longest_wait_s(sender) for sender in senders):.1f} s, "
            f"judged {judged_s:.1f} s after the last")


def _workers(lab):
    """Worker processes: the parent and its two children; more would be left over from a killed one."""
    return sum(WORDS["worker"] in line for line in processes_of(lab.folder))


def _print_figures(capsys, killed, senders, judged_s):
    tallies = [sender.tally for sender in senders]
    total = {name: sum(getattr(tally, name) for tally in tallies) for name in ("known", "unanswered", "lost", "told_to_wait")}
    batches = sum(len(tally.acknowledged_s) for tally in tallies)
    with capsys.disabled():
        print(f"\n[kill] {', '.join(killed)}: {sum(len(sender.course) for sender in senders)} readings in {batches} acknowledged "
              f"batches, {total['known']} answered as known, {total['unanswered']} attempts unanswered, {total['told_to_wait']} "
              f"told to wait, {total['lost']} answers lost on purpose; judged {judged_s:.1f} s after the last acknowledgement")
