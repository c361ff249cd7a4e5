"""Puts a backup back: into an empty lab, or over another with an explicit word; its list is verified before all else."""

import hashlib
import shutil
from collections.abc import Callable
from pathlib import Path

from django.conf import settings
from django.core.files.base import File
from django.db import connection

from ingest.store.days.storage import days_storage
from labmon.backup.make import DAYS, DUMP, FILES, SECRET
from labmon.backup.manifest import BackupFault, Manifest, digest_of, faults_in, read_manifest
from labmon.backup.programs import programs_for
from labmon.backup.programs import restore as restore_dump

Say = Callable[[str], None]


def restore_backup(folder: Path, say: Say, *, may_overwrite: bool = False) -> Manifest:
    """Put the backup of a folder into the lab the settings name, whose database runs and whose other parts are stopped.

    Raises:
        BackupFault: The backup is not whole, or the lab holds readings or people and ``may_overwrite`` is not given.
    """
    manifest = read_manifest(folder)
    say(f"checking {len(manifest.files)} files")
    if faults := list(faults_in(folder, manifest)):
        raise BackupFault(f"{folder} is damaged: {'; '.join(faults[:5])}. Nothing was changed; use another backup.")
    programs = programs_for(_server_version())
    if programs.version < manifest.postgres:
        raise BackupFault(f"The dump is of PostgreSQL {manifest.postgres}, the programs here are {programs.version}. "
                          "Install the newer ones.")
    if not may_overwrite and (held := what_is_held()):
        raise BackupFault(f"This lab holds {held}. Restore into a new data folder, or say --overwrite to lose what is there.")
    say("day files")
    for name in manifest.files:
        if name.startswith(f"{DAYS}/"):
            _put_day(folder / name, name.removeprefix(f"{DAYS}/"), manifest.files[name][1])
    say("uploaded files and the secret key")
    _put_own_files(folder)
    say("database")
    _empty_database()
    restore_dump(programs, folder / DUMP)
    return manifest


def what_is_held() -> str:
    """What would be lost, in words; empty for a new lab."""
    with connection.cursor() as cursor:
        cursor.execute("SELECT to_regclass('ingest_station'), to_regclass('labmon_auditentry')")
        if None in cursor.fetchone():
            return ""
        cursor.execute("SELECT (SELECT count(*) FROM ingest_station), (SELECT count(*) FROM labmon_person)")
        stations, people = cursor.fetchone()
    return f"{stations} stations and {people} people" if stations or people > 1 else ""


def _server_version() -> int:
    connection.ensure_connection()
    return connection.connection.info.server_version // 10_000


def _put_day(source: Path, name: str, digest: str) -> None:
    """A file that is there already as it should be stays; names are never used twice, so another content is damage."""
    storage = days_storage()
    if storage.exists(name):
        with storage.open(name, "rb") as kept:
            if hashlib.file_digest(kept, "sha256").hexdigest() == digest:
                return
        storage.delete(name)
    with source.open("rb") as content:
        storage.save(name, File(content))


def _put_own_files(folder: Path) -> None:
    if (folder / FILES).is_dir():
        shutil.copytree(folder / FILES, settings.MEDIA_ROOT, dirs_exist_ok=True)
    kept = settings.DATA_DIR / SECRET
    if kept.is_file() and digest_of(kept) == digest_of(folder / SECRET):
        return
    part = kept.with_name(f".{SECRET}.part")
    part.touch(mode=0o600)
    part.write_text((folder / SECRET).read_text())
    part.rename(kept)


def _empty_database() -> None:
    """Nobody else may be in it: other connections are ended, then all of it goes."""
    with connection.cursor() as cursor:
        cursor.execute("SELECT pg_terminate_backend(pid) FROM pg_stat_activity "
                       "WHERE datname = current_database() AND pid <> pg_backend_pid()")
        cursor.execute("DROP SCHEMA public CASCADE")
        cursor.execute("CREATE SCHEMA public")
    connection.close()
