"""The database is restarted in good order, and killed while days and inbox are being sealed: the same readings, bit for bit."""

import os
import random
import signal
import subprocess
import sys
import time

import psycopg
import pytest

from tests.faults.bench import await_all_sent, await_judged, expected_readings, make_taps, start_senders, told_of
from tests.faults.course import stokes_course, two_port_course
from tests.faults.figures import balance_of, note_fault
from tests.faults.history import balances, calls_of, longest_wait_s, sent_rows, stored_rows
from tests.faults.test_kill import BACK_WITHIN_S, WORDS
from tests.running_lab import PROJECT, clean_environ, manage, until_true

pytestmark = pytest.mark.slow

DAYS = 12
#: One reading each two minutes: of a dozen days that are long over.
SLOW = ((30.0, DAYS * 86_400),)
STEP_US = 120_000_000
#: A midnight.
DAY_US = 86_400_000_000
LONG_AGO_US = 1_750_032_000_000_000
SEAL = ("from ingest.store.seal import seal_inbox; from ingest.store.days.seal import seal_days; "
        "print('sealing', flush=True); seal_inbox(after_s=-1); seal_days(); print('sealed', flush=True)")
KILLS = 3


def test_restarted_in_good_order(lab, visitor, undisturbed):
    """As an administrator does it: a fast shutdown, twice in the course."""
    taps = make_taps(visitor, "restart")
    senders = start_senders(lab, taps, seed=111, lost_share=0.1)
    for _ in range(2):
        time.sleep(9.0)
        os.kill(lab.pid_of(WORDS["database"]), signal.SIGINT)
    await_all_sent(senders, 90.0)
    assert until_true(lambda: lab.status("/health/services") == 200, BACK_WITHIN_S)
    judged_s, total = await_judged(lab), balances(visitor, taps, senders)
    for tap, sender, calm in zip(taps, senders, undisturbed, strict=True):
        told = told_of(visitor, tap, sender)
        assert told.readings == expected_readings(sender) and told.episodes == calm.episodes
    waits = [longest_wait_s(sender) for sender in senders]
    note_fault("database restarted", "fast shutdown twice in 40 s", total, calls=len(calls_of(lab, taps)),
               recovered=f"longest time between two acknowledgements {max(waits):.1f} s, judged {judged_s:.1f} s after the last",
               also=f"{sum(sender.tally.told_to_wait for sender in senders)} told to wait")
    assert total.is_exact


def test_killed_while_sealing(lab, visitor):
    """Three times kill -9 in the middle of sealing a dozen fresh days of two taps."""
    generator, killed, sent, waits = random.Random(121), [], [], []
    taps = make_taps(visitor, "seal", (two_port_course(9, SLOW, STEP_US), stokes_course(10, SLOW, STEP_US)), 120.0)
    for turn in range(KILLS):
        started_us = LONG_AGO_US + turn * DAYS * DAY_US
        senders = start_senders(lab, taps, seed=122 + 10 * turn, started_us=started_us, most=1000, pause_s=0.0)
        await_all_sent(senders, 60.0)
        sent += [rows for sender in senders for rows in sent_rows(sender)]
        killed.append(kill_while_sealing(lab, generator))
        began_s = time.monotonic()
        assert until_true(lambda: lab.status("/health/services") == 200, BACK_WITHIN_S)
        waits.append(time.monotonic() - began_s)
        assert compare(visitor, taps, sent).is_exact, killed
    in_the_middle = sum(is_broken for _, is_broken in killed)
    assert in_the_middle >= 2, f"the sealing was over before the kill: {killed}"
    manage("shell", "-v", "0", "-c", SEAL, folder=lab.folder)
    total = compare(visitor, taps, sent)
    assert sealed_days(lab, taps) == 2 * DAYS * KILLS
    assert "All well" in manage("verify_store", folder=lab.folder)
    note_fault("database kill -9 while sealing", f"{KILLS} times, {in_the_middle} of them amid sealing {2 * DAYS} days", total,
               calls=len(calls_of(lab, taps)),
               recovered=f"services well after at most {max(waits):.1f} s (the supervisor's pauses double)",
               also=f"days sealed at the kill: {', '.join(str(days) for days, _ in killed)}; then all, and verified")
    assert total.is_exact


def compare(visitor, taps, sent):
    """All that is stored of both taps beside all that was sent."""
    until_us, stored = LONG_AGO_US + (KILLS * DAYS + 1) * DAY_US, []
    for tap in taps:
        stored += stored_rows(visitor, tap, LONG_AGO_US - DAY_US, until_us, list(tap.course.columns))
    return balance_of(sent, stored)


def sealed_days(lab, taps):
    """Day files of the taps."""
    with psycopg.connect(lab.services["database_url"]) as database:
        return database.execute("SELECT count(*) FROM ingest_dayfile d JOIN ingest_tap t ON t.id = d.tap_id "
                                "JOIN ingest_station s ON s.id = t.station_id WHERE s.name = ANY(%s)",
                                [[tap.station for tap in taps]]).fetchone()[0]


def kill_while_sealing(lab, generator):
    """Seal in a process of its own, kill the database some days later; (days sealed then, whether sealing was broken off)."""
    with psycopg.connect(lab.services["database_url"], autocommit=True) as database:
        count = "SELECT count(*) FROM ingest_dayfile"
        before = database.execute(count).fetchone()[0]
        sealing = subprocess.Popen([sys.executable, PROJECT / "manage.py", "shell", "-v", "0", "-c", SEAL, "--data", lab.folder],
                                   cwd=PROJECT, env=clean_environ(), stdin=subprocess.DEVNULL, stdout=subprocess.PIPE,
                                   stderr=subprocess.STDOUT, text=True)
        assert "sealing" in sealing.stdout.readline()
        after = generator.randrange(2 * DAYS - 4)
        while (days := database.execute(count).fetchone()[0] - before) < after and sealing.poll() is None:
            time.sleep(0.001)
        time.sleep(generator.uniform(0.0, 0.03))
        os.kill(lab.pid_of(WORDS["database"]), signal.SIGKILL)
    sealing.communicate(timeout=60)
    return days, sealing.returncode != 0
