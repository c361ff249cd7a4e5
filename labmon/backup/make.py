"""Makes a backup while the lab runs: the database in one snapshot, and every day file that the snapshot names.

A file that is replaced or forgotten meanwhile stays for hours (ingest.store.days.left), longer than a backup takes; should one
be gone all the same, the backup fails and says so.
"""

import json
import shutil
from collections.abc import Callable, Iterator
from datetime import UTC, datetime
from pathlib import Path

import psycopg
from django.conf import settings

from ingest.conninfo import conninfo_of
from ingest.store.days.storage import days_storage
from labmon.backup.manifest import NAME, BackupFault, Manifest, digest_of
from labmon.backup.programs import dump, programs_for

Say = Callable[[str], None]
DUMP, DAYS, FILES, SECRET = "database.dump", "days", "files", "secret-key"


def make_backup(folder: Path, say: Say) -> Manifest:
    """Write a backup into a new or empty folder.

    Raises:
        BackupFault: The folder holds something, or a part cannot be copied.
    """
    _take(folder)
    with psycopg.connect(**conninfo_of(settings.DATABASES["default"])) as db:
        db.isolation_level = psycopg.IsolationLevel.REPEATABLE_READ
        db.read_only = True
        ((snapshot,),) = db.execute("SELECT pg_export_snapshot()").fetchall()
        programs = programs_for(db.info.server_version // 10_000)
        say("database")
        dump(programs, folder / DUMP, snapshot)
        days = db.execute("SELECT name, sha256 FROM ingest_dayfile ORDER BY name").fetchall()
    say(f"{len(days)} day files")
    for name, sha256 in days:
        _copy_day(folder, name, bytes(sha256).hex())
    say("uploaded files and the secret key")
    _copy_own_files(folder)
    manifest = Manifest(datetime.now(UTC).isoformat(timespec="seconds"), programs.version,
                        {name: digest_of(folder / name) for name in sorted(_names(folder))})
    manifest.write(folder)
    return manifest


def _take(folder: Path) -> None:
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise BackupFault(f"{folder} holds something already. Name a new folder for each backup.")
    folder.mkdir(mode=0o700, parents=True, exist_ok=True)


def _copy_day(folder: Path, name: str, wanted: str) -> None:
    path = folder / DAYS / name
    path.parent.mkdir(parents=True, exist_ok=True)
    try:
        with days_storage().open(name, "rb") as source, path.open("xb") as sink:
            shutil.copyfileobj(source, sink, 1 << 20)
    except OSError as error:
        raise BackupFault(f"The day file {name} cannot be copied ({error.strerror or error}). "
                          "Run manage.py verify_store.") from error
    if digest_of(path)[1] != wanted:
        raise BackupFault(f"The day file {name} is not what was written. Run manage.py verify_store; "
                          "an older backup may have it.")


def _copy_own_files(folder: Path) -> None:
    uploaded = Path(settings.MEDIA_ROOT)
    if uploaded.is_dir():
        shutil.copytree(uploaded, folder / FILES)
    (folder / SECRET).touch(mode=0o600)
    (folder / SECRET).write_text(settings.SECRET_KEY + "\n")


def _names(folder: Path) -> Iterator[str]:
    for path in folder.rglob("*"):
        if path.is_file() and path.name != NAME:
            yield path.relative_to(folder).as_posix()


def about(manifest: Manifest) -> str:
    """A backup in one line."""
    size = sum(size for size, _ in manifest.files.values())
    return json.dumps({"made_at": manifest.made_at, "files": len(manifest.files), "bytes": size})
