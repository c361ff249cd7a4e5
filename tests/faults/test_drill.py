"""A drill in a running lab: its own door, worker, beat, and a real mail server; taken by the API."""

import shutil
import tempfile
from email.header import decode_header, make_header
from pathlib import Path

import psycopg
import pytest

from tests.faults.bench import visitor_of
from tests.labmon.tell.servers import mail_server
from tests.running_lab import RunningLab, clean_environ, until_true

pytestmark = pytest.mark.slow


def test_from_the_false_reading_to_the_person():
    parent = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    with mail_server() as box:
        mail = {"LABMON_MAIL_HOST": "127.0.0.1", "LABMON_MAIL_PORT": str(box.port)}
        with RunningLab(parent / "lab", environ=clean_environ(**mail)) as lab:
            lab.await_ready()
            visitor = visitor_of(lab, "maren")
            with psycopg.connect(lab.services["database_url"]) as database:
                database.execute("UPDATE labmon_person SET email = 'maren@lab.example' WHERE username = 'maren'")
                database.execute("INSERT INTO labmon_drill (person_id, person_name, begun_at, failed_step, fault) "
                                 "SELECT id, username, now(), '', '' FROM labmon_person WHERE username = 'maren'")
            assert until_true(lambda: box.mails, 60.0), "no mail within a minute"
            assert str(make_header(decode_header(box.mails[0][1]["Subject"]))).startswith("Drill, nothing is wrong.")
            (event,) = visitor.call("GET", "events")["events"]
            assert event["is_drill"]
            visitor.call("POST", f"events/{event['id']}/acknowledge")
            with psycopg.connect(lab.services["database_url"], autocommit=True) as database:
                question = ("SELECT sent_at, answered_at, reduced_at, raised_at, written_at, handed_at, taken_at, failed_step, "
                            "ended_at FROM labmon_drill")
                assert until_true(lambda: database.execute(question).fetchone()[8] is not None, 30.0)
                *times, failed, _ended = database.execute(question).fetchone()
            assert failed == "" and times == sorted(times), times
            print(f"\n[drill] false reading to mail handed over {(times[5] - times[0]).total_seconds():.1f} s")
            lab.stop()
    shutil.rmtree(parent)
