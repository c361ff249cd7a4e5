"""pg_dump and pg_restore of the right version, on the database that Django is set up for."""

import os
import subprocess
from pathlib import Path

from django.conf import settings

from ingest.conninfo import conninfo_of
from labmon.backup.manifest import BackupFault
from labmon.engines.binaries import PostgresPrograms, find_postgres

_VARIABLES = {"dbname": "PGDATABASE", "user": "PGUSER", "password": "PGPASSWORD", "host": "PGHOST", "port": "PGPORT"}


def dump(programs: PostgresPrograms, to: Path, snapshot: str) -> None:
    """The whole database as it is in an exported snapshot."""
    _run(programs, "pg_dump", "--format=custom", f"--snapshot={snapshot}", "--no-owner", "--no-privileges",
         f"--file={to}")


def restore(programs: PostgresPrograms, dumped: Path) -> None:
    """Put a dump into the (empty) database, all or nothing."""
    name = conninfo_of(settings.DATABASES["default"])["dbname"]
    _run(programs, "pg_restore", "--no-owner", "--no-privileges", "--single-transaction", "--exit-on-error", f"--dbname={name}",
         str(dumped))


def programs_for(server_version: int) -> PostgresPrograms:
    """Programs that can read a server of this major version.

    Raises:
        BackupFault: Those here are older than the server.
    """
    programs = find_postgres()
    if programs.version < server_version:
        raise BackupFault(f"The server is PostgreSQL {server_version}, the pg_dump here is {programs.version}: too old. "
                          f"Install PostgreSQL {server_version}'s client programs.")
    return programs


def _run(programs: PostgresPrograms, name: str, *words: str) -> None:
    program = programs.folder / name
    if not program.is_file():
        raise BackupFault(f"{program} is missing. Install PostgreSQL's client programs.")
    named = conninfo_of(settings.DATABASES["default"])
    environ = os.environ | {variable: str(named[key]) for key, variable in _VARIABLES.items() if key in named}
    done = subprocess.run([program, *words], env=environ, capture_output=True, text=True, stdin=subprocess.DEVNULL)
    if done.returncode:
        raise BackupFault(f"{name} failed: {done.stderr.strip()[-500:]}")
