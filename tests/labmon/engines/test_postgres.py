"""The embedded PostgreSQL, with its real settings."""

import os
import signal
import subprocess
import time
from contextlib import contextmanager
from pathlib import Path

import psycopg
import pytest

from labmon.engines import identity
from labmon.engines.binaries import find_postgres
from labmon.engines.child import SAME
from labmon.engines.faults import EngineFault
from labmon.engines.leftover import NO_PROCESS, is_postgres_of
from labmon.engines.postgres import EmbeddedPostgres

as_root = pytest.mark.skipif(os.geteuid() != 0, reason="only root can change user")


@contextmanager
def running(folder, **wishes):
    engine = EmbeddedPostgres(folder, **wishes)
    engine.start()
    try:
        yield engine
    finally:
        engine.stop()


def asked(engine, query):
    with psycopg.connect(engine.url) as database:
        return database.execute(query).fetchone()[0]


def test_restart_keeps_data_and_is_quick(folder, record_property):
    began_s = time.monotonic()
    with running(folder) as engine, psycopg.connect(engine.url) as database:
        first_s = time.monotonic() - began_s
        database.execute("create table kept as select 42 as n")
    began_s = time.monotonic()
    with running(folder) as engine:
        second_s = time.monotonic() - began_s
        assert asked(engine, "select n from kept") == 42
        assert asked(engine, "show fsync") == "on"
        assert asked(engine, "show listen_addresses") == ""
        assert asked(engine, "select lower('ÄÖÜ')") in {"äöü", "ÄÖÜ"}
    print(f"PostgreSQL ready: first {first_s:.2f} s, later {second_s:.2f} s")


def test_stop_leaves_no_process(folder):
    with running(folder) as engine:
        pid = engine.process.pid
        assert is_postgres_of(pid, folder.path / "postgres")
    assert not os.path.exists(f"/proc/{pid}")
    assert not (folder.path / "postgres" / "postmaster.pid").exists()


def test_pid_file_naming_a_stranger_does_not_keep_it_from_starting(folder):
    """A number taken by another process after a crash: the other is left alone, and the server starts."""
    with running(folder) as engine:
        written = (engine.cluster / "postmaster.pid").read_text().splitlines()
    stranger = subprocess.Popen(["sleep", "60"])
    try:
        (engine.cluster / "postmaster.pid").write_text("\n".join([str(stranger.pid), *written[1:]]) + "\n")
        with running(folder) as engine:
            assert asked(engine, "select 1") == 1
        assert stranger.poll() is None
    finally:
        stranger.kill()
        stranger.wait()


def test_no_process_number_reaches_the_stand_in():
    assert int(Path("/proc/sys/kernel/pid_max").read_text()) < NO_PROCESS


def test_starts_again_after_kill_9_and_keeps_what_was_committed(folder):
    with running(folder) as engine:
        with psycopg.connect(engine.url) as database:
            database.execute("create table kept as select 42 as n")
        engine.process.send_signal(signal.SIGKILL)
        engine.process.wait()
        engine.start()
        assert asked(engine, "select n from kept") == 42


def test_server_left_over_is_stopped_first(folder):
    with running(folder) as forgotten:
        left = forgotten.process
        with running(folder) as engine:
            assert left.wait(5) is not None
            assert asked(engine, "select 1") == 1


def test_cluster_of_another_version_is_not_touched(folder):
    with running(folder) as engine:
        version = (engine.cluster / "PG_VERSION").read_text()
    (engine.cluster / "PG_VERSION").write_text("12\n")
    with pytest.raises(EngineFault, match="written by PostgreSQL 12"):
        engine.start()
    (engine.cluster / "PG_VERSION").write_text(version)


@as_root
def test_runs_as_nobody_with_copied_programs(folder, monkeypatch):
    """What a container that forbids user namespaces gets: nobody, and programs under the data folder."""
    other = identity.nobody()
    folder.path.parent.chmod(0o711)
    identity.open_to(folder.path, other)
    (folder.path / "secret-key").touch(0o600)
    real = identity.can_reach
    outside = find_postgres().folder
    monkeypatch.setattr(identity, "can_reach", lambda path, who: outside not in path.parents and real(path, who))
    with running(folder, as_identity=other) as engine:
        assert asked(engine, "select 1") == 1
        uid = os.stat(f"/proc/{engine.process.pid}").st_uid
        program = os.readlink(f"/proc/{engine.process.pid}/exe")
    assert uid == other.owner[0]
    assert program.startswith(str(folder.path))
    with running(folder, as_identity=other) as engine:
        assert asked(engine, "select 1") == 1


@as_root
def test_root_without_namespace_falls_to_nobody_or_says_what_to_do(folder, monkeypatch):
    real = identity.can_reach
    monkeypatch.setattr(identity, "can_reach", lambda path, who: who != identity.NAMESPACE and real(path, who))
    folder.path.parent.chmod(0o700)
    with pytest.raises(EngineFault, match="ordinary user.*--data.*LABMON_DATABASE_URL"):
        identity.choose_identity(folder.path)
    assert folder.path.parent.stat().st_mode & 0o777 == 0o700, "nothing outside the data folder is opened up"
    folder.path.parent.chmod(0o711)
    assert identity.choose_identity(folder.path) == identity.nobody()


def test_ordinary_user_runs_it_as_itself(folder, monkeypatch):
    monkeypatch.setattr(os, "geteuid", lambda: 1000)
    assert identity.choose_identity(folder.path) == SAME
