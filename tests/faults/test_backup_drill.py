"""The drill: a lab is backed up while stations send, destroyed, restored, and compared bit for bit."""

import json
import shutil
import tempfile
import time
import urllib.request
from pathlib import Path

import pytest

from tests.faults.bench import LONGEST_RUN_S, await_all_sent, await_judged, make_taps, start_senders, told_of, visitor_of
from tests.running_lab import RunningLab, manage

pytestmark = pytest.mark.slow

SEAL = ("from ingest.store.seal import seal_inbox; from ingest.store.days.seal import seal_days; "
        "seal_inbox(after_s=-1); seal_days()")
#: Every reading of the named taps to the last bit, their alarms, and the audit up to a row, each as one digest.
FINGERPRINT = """
import hashlib, json
from django.db import connection
from ingest.models import DayFile, Tap
from ingest.store.days.write import add_content
from ingest.store.read import read_readings
said = {{}}
for tap in Tap.objects.filter(station__name__startswith={name!r}).order_by("pk"):
    digest = hashlib.sha256()
    readings = read_readings(tap.pk, -2**62, 2**62)
    add_content(digest, readings)
    said[tap.name] = [len(readings), digest.hexdigest()]
cursor = connection.cursor()
for table, which in (("labmon_alarm", "tap_id IN (SELECT tap.id FROM ingest_tap tap JOIN ingest_station s ON s.id = station_id "
                      "WHERE s.name LIKE '{name}%')"), ("labmon_auditentry", "id <= {audit}"), ("labmon_person", "true"),
                     ("ingest_tapboot", "tap_id IN (SELECT tap.id FROM ingest_tap tap JOIN ingest_station s "
                      "ON s.id = station_id WHERE s.name LIKE '{name}%')")):
    cursor.execute(f"SELECT count(*), md5(string_agg(t::text, '|' ORDER BY t::text)) FROM {{table}} t WHERE {{which}}")
    said[table] = list(cursor.fetchone())
said["days"] = DayFile.objects.count()
cursor.execute("SELECT max(id) FROM labmon_auditentry")
said["audit"] = cursor.fetchone()[0]
print("@" + json.dumps(said))
"""


def fingerprint(folder, audit=2**62):
    said = manage("shell", "-v", "0", "-c", FINGERPRINT.format(name="drill", audit=audit), folder=folder)
    return json.loads(next(line for line in said.splitlines() if line.startswith("@"))[1:])


def send_an_old_day(lab, tap):
    """Readings of a day that is long over, so that there is a day file to back up."""
    start_us = 1_750_000_000_000_000
    columns = {"sequence": list(range(2000)), "at": [start_us + 1_000_000 * number for number in range(2000)],
               "port1": [1e-3 + 1e-9 * number for number in range(2000)],
               "port2": [1e-6 + 1e-12 / (number + 1) for number in range(2000)]}
    request = urllib.request.Request(f"http://127.0.0.1:{lab.port}/api/v1/readings", method="POST",
                                     data=json.dumps({"boot": "old", "taps": {tap.name: columns}}).encode(),
                                     headers={"Authorization": f"Bearer {tap.key}", "Content-Type": "application/json"})
    with urllib.request.urlopen(request, timeout=30) as answer:
        assert json.load(answer)["stored"] == 2000


def test_destroyed_and_restored_the_lab_is_the_same_bit_for_bit(capsys):
    root = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    with RunningLab(root / "lab") as lab:
        lab.await_ready()
        visitor = visitor_of(lab)
        taps = make_taps(visitor, "drill")
        senders = start_senders(lab, taps, seed=61)
        send_an_old_day(lab, taps[0])
        await_all_sent(senders, LONGEST_RUN_S)
        await_judged(lab)
        manage("shell", "-v", "0", "-c", SEAL, folder=lab.folder)
        before = fingerprint(lab.folder)
        told = [told_of(visitor, tap, sender) for tap, sender in zip(taps, senders, strict=True)]
        others = make_taps(visitor, "during")
        live = start_senders(lab, others, seed=71)
        time.sleep(3.0)
        acknowledged = [sender.tally.stored for sender in live]
        began_s = time.monotonic()
        about = json.loads(manage("backup", str(root / "backup"), folder=lab.folder))
        took_s = time.monotonic() - began_s
        assert any(sender.is_alive() for sender in live), "nobody was sending during the backup: the run shows nothing"
        for sender in live:
            sender.given_up.set()
            sender.join(10.0)
        lab.stop()
    shutil.rmtree(root / "lab")
    manage("restore", str(root / "backup"), folder=root / "lab")
    with RunningLab(root / "lab") as lab:
        lab.await_ready()
        after = fingerprint(lab.folder, audit=before["audit"])
        audit = before.pop("audit")
        assert {name: after[name] for name in before} == before and audit > 0
        assert before["days"] >= 1 and before["labmon_alarm"][0] > 0 and before["in"][0] > 2000
        visitor.lab = lab
        for tap, sender, then in zip(taps, senders, told, strict=True):
            assert told_of(visitor, tap, sender) == then, "the person's old key opens the restored lab"
        for tap, sender, least in zip(others, live, acknowledged, strict=True):
            kept = told_of(visitor, tap, sender).readings
            assert len(kept) >= least > 0
            made = [values.tolist() for values in sender.course.columns.values()]
            assert all(row == (sender.boot, row[1], sender.started_us + int(sender.course.after_us[row[1]]),
                               *(column[row[1]] for column in made)) for row in kept)
        assert "All well" in manage("verify_store", folder=lab.folder)
        lab.stop()
    shutil.rmtree(root)
    with capsys.disabled():
        print(f"\n[drill] backup of {about['bytes'] / 1e6:.1f} MB in {about['files']} files: {took_s:.1f} s while stations sent")
