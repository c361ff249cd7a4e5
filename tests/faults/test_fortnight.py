"""A fortnight of forty benches in fast motion, with known faults, while worker, broker and database are each killed once.

How time works here, honestly: an excursion that lies in the past calls nobody, so history cannot be poured in and judged
for calls; it must happen now. So a day of the lab is `DAY_S` seconds here, and what people would set is shortened with
it: on-delay 2 s, silence called after 20 s. What labmon itself fixes is not shortened: alarms within 30 s that share
something are one event, a call waits 10 s for others. The faults are laid so that 30 s decide nothing by accident. What
is not shown: fourteen true nights, with their noise and slow drift, and reminders (15 min); those have tests of their own.

All parts are real: the door by HTTP, worker, beat, broker and database of ``run_lab``, mail by SMTP to a server that keeps
what it gets. Counted is what that server took, by Message-ID as a reader's program does; a crash between the server's
answer and our note of it may hand over the same Message-ID twice, and such repeats are printed.
"""

import json
import os
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path

import psycopg
import pytest

from tests.faults.course import Segments, two_port_course
from tests.faults.sender import HonestSender
from tests.faults.test_kill import BACK_WITHIN_S, WORDS
from tests.labmon.tell.servers import mail_server
from tests.running_lab import PROJECT, RunningLab, clean_environ, processes_of, until_true

pytestmark = pytest.mark.slow

BENCHES, OWNERS, DAY_S, DAYS = 40, 10, 10, 14
RUN_S = DAY_S * DAYS
STEP_US, GOOD_DB, LOW_DB = 1_000_000, 30.0, 12.0
#: Seconds from the start: a network of twelve benches is away.
OUTAGE = (15.0, 50.0)
CUT_OFF = range(12)
#: bench -> (from, seconds low): known excursions. Five on laser Beacon; two that share a network only, which turns no light.
LOW: dict[int, list[tuple[int, int]]] = {
    24: [(60, 10)], 25: [(60, 10)], 26: [(61, 9)], 27: [(60, 10)], 28: [(61, 10)],
    29: [(85, 8)], 13: [(100, 8)], 16: [(100, 8)],
    30: [(5, 8), (115, 8)],
    31: [(30, 1)],
}
KILLS = ((38.0, "broker"), (63.0, "worker"), (103.0, "database"))
#: (owner, benches of one event that are theirs): every call that is right, and nothing else. Four benches an owner.
CALLS = Counter({
    (7, "b30"): 2, (0, "b00 b01 b02 b03"): 1, (1, "b04 b05 b06 b07"): 1, (2, "b08 b09 b10 b11"): 1,
    (6, "b24 b25 b26 b27"): 1, (7, "b28"): 1, (7, "b29"): 1, (3, "b13"): 1, (4, "b16"): 1,
})
#: Alarms of each event, smallest first.
EVENTS = [1, 1, 1, 1, 1, 5, 12]
MAKE = """
import json, django
django.setup()
from django.db import transaction
from ingest.stations import NewTap
from labmon.benches.actions import add_bench, set_shared
from labmon.experiments.actions import create_experiment, set_limit
from labmon.people.actions import add_person
keys = []
with transaction.atomic():
    owners = [add_person(f"owner{n}", "owner", email=f"owner{n}@lab.example") for n in range(%(owners)d)]
    add_person("bystander", "researcher", email="bystander@lab.example")
    add_person("chief", "manager", email="chief@lab.example")
    for n in range(%(benches)d):
        station, key = add_bench(f"b{n:02d}", taps=[NewTap("out", "two-port", "mW", interval_s=1.0)], owner=owners[n // 4])
        network = "net-a" if n < 12 else "net-b" if n < 24 else ""
        set_shared(station, room="", laser="Beacon" if 24 <= n < 29 else "", logger="", network=network, by=None)
        tap = station.taps.get()
        experiment = create_experiment(f"b{n:02d} watch", [tap], by=None, owner=owners[n // 4], no_reading_after_s=20.0)
        set_limit(experiment, tap, "er_db", alarm=20.0, on_delay_s=2.0, off_delay_s=2.0, by=None)
        keys.append(key)
print(json.dumps(keys))
"""


class BenchOnNetwork(HonestSender):
    """Sends as long as its network is there; keeps what it could not send."""

    is_cut_off = False

    def _send_some(self) -> float:
        now_s = time.time() - self.started_us / 1e6
        return 0.0 if self.is_cut_off and OUTAGE[0] <= now_s < OUTAGE[1] else super()._send_some()


def segments_of(bench: int) -> Segments:
    """Levels by whole seconds."""
    told, at_s = [], 0
    for from_s, low_s in LOW.get(bench, []):
        told += [(GOOD_DB, from_s - at_s), (LOW_DB, low_s)]
        at_s = from_s + low_s
    return (*told, (GOOD_DB, RUN_S - at_s))


@pytest.fixture(scope="module")
def mailbox():
    with mail_server() as box:
        yield box


@pytest.fixture(scope="module")
def mailing_lab(mailbox):
    parent = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    mail = {"LABMON_MAIL_HOST": "127.0.0.1", "LABMON_MAIL_PORT": str(mailbox.port), "LABMON_MAIL_FROM": "labmon@lab.example"}
    environ = clean_environ(**mail)
    with RunningLab(parent / "lab", environ=environ) as running:
        running.await_ready()
        yield running
        running.stop()
    assert until_true(lambda: processes_of(parent / "lab") == [], 10.0), processes_of(parent / "lab")
    shutil.rmtree(parent)


def make_benches(lab: RunningLab) -> list[str]:
    """Benches, owners and limits, by the actions that the pages call; the stations' keys."""
    environ = clean_environ(LABMON_DATA=str(lab.folder), DJANGO_SETTINGS_MODULE="labmon.settings", LABMON_LOG_LEVEL="ERROR")
    said = subprocess.run([sys.executable, "-c", MAKE % {"owners": OWNERS, "benches": BENCHES}], env=environ, cwd=PROJECT,
                          capture_output=True, text=True)
    assert said.returncode == 0, said.stderr
    return json.loads(said.stdout)


def begin(lab: RunningLab, keys: list[str]) -> list[BenchOnNetwork]:
    """All benches from the same whole second; and, to bench 39, a spool of ten minutes ago with an excursion in it."""
    started_us = (time.time_ns() // 1_000_000_000 + 3) * 1_000_000
    senders = []
    for number, key in enumerate(keys):
        course = two_port_course(number, segments_of(number), STEP_US)
        sender = BenchOnNetwork(port=lab.port, key=key, tap="out", course=course, started_us=started_us, seed=number, pause_s=2.0)
        sender.is_cut_off = number in CUT_OFF
        senders.append(sender)
    old = two_port_course(99, ((GOOD_DB, 20), (LOW_DB, 20), (GOOD_DB, 20)), STEP_US)
    spool = BenchOnNetwork(port=lab.port, key=keys[39], tap="out", course=old, started_us=started_us - 600_000_000, seed=99)
    for sender in (*senders, spool):
        sender.start()
    return [*senders, spool]


def kill_in_turn(lab: RunningLab, started_us: int) -> list[str]:
    """kill -9 each part at its moment."""
    killed = []
    for at_s, victim in KILLS:
        time.sleep(max(started_us / 1e6 + at_s - time.time(), 0.0))
        assert until_true(lambda words=WORDS[victim]: any(words in line for line in processes_of(lab.folder)), BACK_WITHIN_S)
        os.kill(lab.pid_of(WORDS[victim]), signal.SIGKILL)
        killed.append(f"{victim} at {time.time() - started_us / 1e6:.0f} s")
    return killed


def asked(lab: RunningLab, question: str) -> list[tuple]:
    """Rows of the lab's database; none while it is away."""
    try:
        with psycopg.connect(lab.services["database_url"], connect_timeout=5) as database:
            return database.execute(question).fetchall()
    except psycopg.OperationalError:
        return []


def is_told(lab: RunningLab) -> bool:
    """True where nothing waits to be judged, told or handed over."""
    return asked(lab, "SELECT (SELECT count(*) FROM ingest_touch) + (SELECT count(*) FROM labmon_event WHERE due_at IS NOT NULL)"
                      " + (SELECT count(*) FROM labmon_delivery WHERE sent_at IS NULL)") == [(0,)]


def calls_in(mails) -> Counter:
    """(owner, their benches) of each call that the mail server took, each Message-ID once."""
    once = {mail["Message-ID"]: (to, mail) for to, mail in mails}
    found = Counter()
    for to, mail in once.values():
        lines = mail.get_payload(decode=True).decode().splitlines()
        benches = sorted({line.split("/out:")[0] for line in lines if "/out:" in line})
        for address in to:
            who = int(address.removeprefix("owner").split("@")[0]) if address.startswith("owner") else address
            found[_wanted(who, set(benches))] += 1
    return found


def _wanted(who: int | str, benches: set[str]) -> tuple[int | str, str]:
    """The wanted call that a mail is: of this owner, about some of these benches and no others.

    A bench whose alarm comes when the call is out (a killed worker takes longer than the 10 s that a call waits) joins its
    event without another call: the page has it, the mail has not.
    """
    known = (call for call in CALLS if call[0] == who and benches and benches <= set(call[1].split()))
    return next(known, (who, " ".join(sorted(benches))))


def test_a_fortnight_of_forty_benches(mailing_lab, mailbox, capsys):
    lab = mailing_lab
    senders = begin(lab, make_benches(lab))
    killed = kill_in_turn(lab, senders[0].started_us)
    for sender in senders:
        sender.join(max(senders[0].started_us / 1e6 + RUN_S + 60 - time.time(), 0.1))
        assert not sender.is_alive() and sender.tally.unforeseen == [], (sender.name, len(sender.waiting))
    assert until_true(lambda: is_told(lab), 60.0), asked(lab, "SELECT key FROM labmon_message")
    found, ids = calls_in(mailbox.mails), Counter(mail["Message-ID"] for _, mail in mailbox.mails)
    events = asked(lab, "SELECT e.id, e.kind, count(*) FROM labmon_event e JOIN labmon_alarm a ON a.event_id = e.id "
                        "GROUP BY e.id ORDER BY e.id")
    missed, extra = CALLS - found, found - CALLS
    with capsys.disabled():
        print(f"\n[fortnight] {BENCHES} benches, {DAYS} days of {DAY_S} s; killed {', '.join(killed)}; "
              f"{sum(len(sender.course) for sender in senders):,} readings; {len(events)} events of {len(EVENTS)}, "
              f"{sum(found.values())} calls of {sum(CALLS.values())}; missed {sum(missed.values())}, "
              f"not wanted {sum(extra.values())}, handed over again by a crash {sum(ids.values()) - len(ids)}")
    assert missed == Counter() and extra == Counter(), (missed, extra, events)
    assert sorted(count for _, _, count in events) == EVENTS, events
    subjects = [mail["Subject"] for _, mail in mailbox.mails]
    assert sum("net-a" in subject for subject in subjects) == 3, subjects
