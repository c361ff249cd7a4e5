"""An embedded PostgreSQL: made once, started, watched and stopped by us; Unix socket only."""

import os
import signal
import subprocess
import time
from collections.abc import Mapping
from pathlib import Path

import psycopg

from labmon.engines import child, identity, leftover
from labmon.engines.binaries import PostgresPrograms, find_postgres
from labmon.engines.child import Identity
from labmon.engines.faults import EngineFault
from labmon.engines.folder import DataFolder, own_folder

USER = DATABASE = "labmon"
READY_WITHIN_S = 60.0
STOP_WITHIN_S = 15.0
FIRST_SETTINGS = """# Written once by labmon; yours to change.
shared_buffers = 128MB
max_connections = 60
max_wal_size = 1GB
checkpoint_timeout = 15min
log_timezone = UTC
timezone = UTC
log_min_messages = warning
"""


class EmbeddedPostgres:
    """The server whose cluster lies in the data folder's ``postgres``.

    Args:
        folder: The data folder, held by this process.
        settings: Server settings that win over the files, e.g. ``{"fsync": "off"}`` for a throw-away test session.
        as_identity: Whom to run as; None chooses.
    """

    name = "database"
    title = "PostgreSQL"

    def __init__(self, folder: DataFolder, settings: Mapping[str, str] | None = None,
                 as_identity: Identity | None = None) -> None:
        self.folder = folder
        self.cluster = folder.path / "postgres"
        self.settings = dict(settings or {})
        self.identity = as_identity or identity.choose_identity(folder.path)
        self.process: subprocess.Popen[bytes] | None = None
        self.socket_folder = self._sockets()

    def _sockets(self) -> Path:
        """The folder for sockets; under /tmp another user gets one beside Valkey's."""
        shared = self.folder.sockets()
        if self.identity.owner is None or shared.parent == self.folder.path:
            return shared
        return own_folder(shared.with_name(shared.name + "-p"), {os.geteuid(), self.identity.owner[0]})

    @property
    def url(self) -> str:
        """Address for psycopg and for LABMON_DATABASE_URL."""
        return f"postgresql://{USER}@/{DATABASE}?host={self.socket_folder}"

    @property
    def is_made(self) -> bool:
        """Whether the cluster exists."""
        return (self.cluster / "PG_VERSION").is_file()

    def start(self) -> None:
        """Make the cluster if need be, start the server and wait until it answers.

        Raises:
            EngineFault: It does not run; the message names its log.
        """
        programs = identity.programs_for(self.identity, find_postgres(), self.folder.path)
        if not self.is_made:
            self._make_cluster(programs)
        self._check_version(programs)
        self.title = f"PostgreSQL {programs.version}"
        leftover.clear_postgres(self.cluster)
        identity.give(self.socket_folder, self.identity)
        until = time.monotonic() + READY_WITHIN_S
        while not self._started(programs, until):
            time.sleep(0.2)

    def _make_cluster(self, programs: PostgresPrograms) -> None:
        """initdb into a folder beside, then rename: a first start that was killed leaves no half cluster."""
        part = self.folder.path / "postgres.part"
        leftover.remove_tree(part)
        part.mkdir(mode=0o700)
        identity.give(part, self.identity)
        locale = (["--locale-provider=builtin", "--builtin-locale=C.UTF-8", "--locale=C"] if programs.version >= 17
                  else ["--locale=C"])
        command = [programs.folder / "initdb", "-D", part, "-U", USER, "--encoding=UTF8", *locale, "--auth=trust"]
        if self.settings.get("fsync") == "off":
            command.append("--no-sync")
        done = subprocess.run(child.launched(command, identity=self.identity), capture_output=True, text=True,
                              stdin=subprocess.DEVNULL, cwd=part, env=self._environ())
        if done.returncode != 0:
            raise EngineFault(f"PostgreSQL could not make its files in {part}: {done.stderr.strip() or done.stdout}")
        (part / "labmon.conf").write_text(FIRST_SETTINGS)
        with (part / "postgresql.conf").open("a") as file:
            file.write("\ninclude_if_exists = 'labmon.conf'\n")
        identity.give(part / "labmon.conf", self.identity)
        part.rename(self.cluster)

    def _check_version(self, programs: PostgresPrograms) -> None:
        kept = int((self.cluster / "PG_VERSION").read_text())
        if kept != programs.version:
            raise EngineFault(f"{self.cluster} was written by PostgreSQL {kept}, and this labmon brings "
                              f"{programs.version}. docs/operations.md, 'Upgrade', says how to carry it over.")

    def _started(self, programs: PostgresPrograms, until: float) -> bool:
        """One attempt; False where the server went at once and another attempt may help (a killed one's remains)."""
        fixed = {"listen_addresses": "", "unix_socket_directories": str(self.socket_folder),
                 "unix_socket_permissions": "0700", "logging_collector": "off"}
        options = [part for key, value in (self.settings | fixed).items() for part in ("-c", f"{key}={value}")]
        log_path = self.folder.logs / "database.log"
        with log_path.open("ab") as log:
            said_from = log.tell()
            self.process = child.start([programs.folder / "postgres", "-D", self.cluster, *options], log=log,
                                       identity=self.identity, death_signal=signal.SIGINT, folder=self.cluster,
                                       environ=self._environ())
        while self.process.poll() is None:
            if self.answers():
                self._make_database()
                return True
            if time.monotonic() > until:
                self.stop()
                raise EngineFault(f"PostgreSQL did not answer within {READY_WITHIN_S:.0f} s; see {log_path}.")
            time.sleep(0.02)
        said = log_path.read_bytes()[said_from:].decode(errors="replace").strip()
        if "pre-existing shared memory" in said and time.monotonic() < until:
            return False
        raise EngineFault(f"PostgreSQL did not start; see {log_path}. It said: {said[-600:]}")

    def answers(self) -> bool:
        """Whether it takes a connection now."""
        try:
            psycopg.connect(host=str(self.socket_folder), user=USER, dbname="postgres", connect_timeout=2).close()
        except psycopg.OperationalError:
            return False
        return True

    def _make_database(self) -> None:
        with psycopg.connect(host=str(self.socket_folder), user=USER, dbname="postgres", autocommit=True) as database:
            if database.execute("select 1 from pg_database where datname = %s", [DATABASE]).fetchone() is None:
                database.execute(f"create database {DATABASE}")

    @staticmethod
    def _environ() -> dict[str, str]:
        """Ours, less what would steer PostgreSQL from outside."""
        return {key: value for key, value in os.environ.items() if not key.startswith(("PG", "LC_", "LANG"))} | {
            "LC_ALL": "C", "TZ": "UTC"}

    def stop(self) -> None:
        """Fast shutdown: open transactions are rolled back, everything committed is on disk."""
        if self.process is not None:
            child.stop(self.process, how=signal.SIGINT, within_s=STOP_WITHIN_S)
