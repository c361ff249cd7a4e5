"""``manage.py run_lab`` as its users meet it: real processes, real signals."""

import os
import re
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
from pathlib import Path

import psycopg
import pytest

from labmon.engines import child, identity
from tests.running_lab import PROJECT, RunningLab, clean_environ, manage, processes_of, until_true

GONE_WITHIN_S = 6.0


@pytest.fixture
def place():
    """A data folder that does not exist yet."""
    path = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    yield path / "lab"
    until_true(lambda: processes_of(path / "lab") == [], GONE_WITHIN_S)
    shutil.rmtree(path)


def people_in(database):
    return [name for (name,) in database.execute("select username from labmon_person order by id")]


def test_start_stop_and_quick_restart_keep_the_lab(place, capsys):
    """First start makes everything; Ctrl-C stops everything; the second start finds it again."""
    with RunningLab(place) as lab:
        first_s = lab.await_ready()
        assert lab.read_until("Sign in as manager")
        assert lab.status("/health/process") == 200
        assert lab.status("/health/services") == 200
        manage("add_person", "kept", "--role", "guest", folder=place)
        first_stop_s = lab.stop()
        assert lab.process.returncode == 0
    assert processes_of(place) == []
    assert not (place / "services.json").exists()
    with RunningLab(place) as lab:
        second_s = lab.await_ready()
        assert "Sign in as" not in lab.said, "the password is shown once"
        with psycopg.connect(lab.services["database_url"]) as database:
            assert people_in(database) == ["manager", "kept"]
        second_stop_s = lab.stop(signal.SIGTERM)
        assert lab.process.returncode == 0
    assert processes_of(place) == []
    with capsys.disabled():
        print(f"\n[run_lab] first start {first_s:.1f} s, second {second_s:.1f} s; "
              f"stops {first_stop_s:.1f} s, {second_stop_s:.1f} s")
    assert second_s < first_s
    assert max(first_stop_s, second_stop_s) < 12.0


def test_taken_port_is_said_before_anything_starts(place):
    with RunningLab(place) as lab:
        with socket.create_server(("127.0.0.1", lab.port)):
            line = lab.read_until("cannot be used")
        assert f"--port {lab.port + 1}" in line
        assert lab.process.wait(10) == 1
    assert processes_of(place) == []


@pytest.mark.slow
def test_second_lab_on_the_same_folder_is_refused(place):
    with RunningLab(place) as lab:
        lab.await_ready()
        with RunningLab(place) as other:
            assert f"process {lab.process.pid}" in other.read_until("Another lab is running")
            assert other.process.wait(10) == 1
        assert lab.status("/health/services") == 200, "the first one is not disturbed"
        lab.stop()


@pytest.mark.slow
def test_killed_supervisor_leaves_no_child_and_the_next_start_works(place):
    with RunningLab(place) as lab:
        lab.await_ready()
        assert len(processes_of(place)) >= 5
        lab.process.kill()
        lab.process.wait()
        assert until_true(lambda: processes_of(place) == [], GONE_WITHIN_S), processes_of(place)
    with RunningLab(place) as lab:
        lab.await_ready()
        lab.stop()


@pytest.mark.slow
@pytest.mark.parametrize("words", ["labmon.web", "labmon.worker prompt", "labmon.worker long", "celery -A labmon beat",
                                   "bin/postgres", "valkey-server"])
def test_killed_part_comes_back(place, words):
    """kill -9 of any one part: it is started again, and the lab is whole again."""
    with RunningLab(place) as lab:
        lab.await_ready()
        killed = lab.pid_of(words)
        os.kill(killed, signal.SIGKILL)
        lab.read_until("started again")
        assert until_true(lambda: lab.status("/health/services") == 200, 20.0)
        assert lab.pid_of(words) != killed
        lab.stop()
    assert processes_of(place) == []


@pytest.mark.slow
def test_ctrl_c_during_the_start_stops_it(place):
    with RunningLab(place) as lab:
        lab.read_until("broker")
        assert lab.stop() < 15.0
        assert lab.process.returncode == 0
    assert processes_of(place) == []


@pytest.mark.slow
def test_given_servers_are_used_and_none_are_started(place, folder):
    from labmon.engines.postgres import EmbeddedPostgres
    from labmon.engines.valkey import EmbeddedValkey

    database, broker = EmbeddedPostgres(folder), EmbeddedValkey(folder)
    try:
        database.start()
        broker.start()
        environ = clean_environ(LABMON_DATABASE_URL=database.url, LABMON_BROKER_URL=broker.url)
        with RunningLab(place, environ=environ) as lab:
            lab.await_ready()
            assert lab.status("/health/services") == 200
            assert [line for line in processes_of(place) if "bin/postgres" in line or "valkey-server" in line] == []
            lab.stop()
        assert not (place / "postgres").exists()
        assert database.answers(), "given servers are not stopped"
    finally:
        broker.stop()
        database.stop()


def _prefix_of_ordinary_user(place):
    """A command that drops root: to ``nobody`` where it can read Python and the project, else into a user namespace."""
    other = identity.nobody()
    if all(identity.can_reach(path, other) for path in (PROJECT, Path(sys.executable).resolve())):
        os.chown(place.parent, *other.owner)
        return ["setpriv", f"--reuid={other.owner[0]}", f"--regid={other.owner[1]}", "--clear-groups"]
    return child.launched(["env"], identity=identity.NAMESPACE)


@pytest.mark.slow
@pytest.mark.skipif(os.geteuid() != 0, reason="only root can become another user; the other tests ran as an ordinary one")
def test_ordinary_user_runs_the_lab(place):
    """The same commands without root; the project only needs to be readable."""
    environ = clean_environ(HOME=str(place.parent), PYTHONDONTWRITEBYTECODE="1")
    with RunningLab(place, environ=environ, prefix=_prefix_of_ordinary_user(place)) as lab:
        lab.await_ready()
        assert lab.status("/health/services") == 200
        status = Path(f"/proc/{lab.pid_of('labmon.web')}/status").read_text()
        assert re.search(r"^CapEff:\s+0+$", status, re.MULTILINE), "it has none of root's rights"
        lab.stop()
    assert processes_of(place) == []


@pytest.mark.slow
def test_backup_by_the_wheels_own_program_restores(place, tmp_path):
    """The two commands of docs/operations.md."""
    from labmon.engines.binaries import find_postgres

    programs = find_postgres().folder
    with RunningLab(place) as lab:
        lab.await_ready()
        manage("add_person", "kept", "--role", "guest", folder=place)
        url, dump = lab.services["database_url"], tmp_path / "labmon.dump"
        subprocess.run([programs / "pg_dump", "--format=custom", f"--file={dump}", url], check=True)
        with psycopg.connect(url, autocommit=True) as database:
            database.execute("create database restored")
        target = url.replace("/labmon?", "/restored?")
        subprocess.run([programs / "pg_restore", "--no-owner", f"--dbname={target}", dump], check=True)
        with psycopg.connect(target) as database:
            assert people_in(database) == ["manager", "kept"]
        lab.stop()
