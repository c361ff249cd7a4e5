"""``manage.py restore FOLDER``: put a backup back."""

import os
import subprocess
import sys
from argparse import ArgumentParser
from pathlib import Path
from typing import Any

from django.conf import settings
from django.core.management.base import CommandError

from labmon.backup.make import about
from labmon.backup.manifest import BackupFault
from labmon.backup.restore import restore_backup
from labmon.engines.faults import EngineFault
from labmon.engines.folder import DataFolder
from labmon.engines.postgres import EmbeddedPostgres
from labmon.management.base import LabCommand, check_database


class Command(LabCommand):
    help = "Put a backup into a new lab; verifies its list first. Stop the lab before."
    needs_database = False

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("folder", type=Path, metavar="FOLDER", help="as manage.py backup wrote it")
        parser.add_argument("--overwrite", action="store_true", help="lose what this lab holds")

    def handle(self, *args: Any, **options: Any) -> str:
        try:
            if not os.environ.get("LABMON_DATABASE_URL"):
                return _with_own_database(options)
            check_database()
            return about(restore_backup(options["folder"].absolute(), self.stderr.write, may_overwrite=options["overwrite"]))
        except (BackupFault, EngineFault) as fault:
            raise CommandError(str(fault)) from fault


def _with_own_database(options: dict[str, Any]) -> str:
    """Start the data folder's own database for as long as it takes; another process, which knows its address, does the rest.

    Raises:
        EngineFault: A lab is running on the folder.
    """
    folder = DataFolder(settings.DATA_DIR)
    folder.make()
    folder.hold()
    engine = EmbeddedPostgres(folder)
    try:
        engine.start()
        done = subprocess.run(
            [sys.executable, str(settings.BASE_DIR / "manage.py"), "restore", str(options["folder"].absolute()),
             *(["--overwrite"] if options["overwrite"] else [])],
            env=os.environ | {"LABMON_DATA": str(folder.path), "LABMON_DATABASE_URL": engine.url,
                              "LABMON_BROKER_URL": settings.BROKER_URL}, capture_output=True, text=True, stdin=subprocess.DEVNULL)
    finally:
        engine.stop()
        folder.release()
    if done.returncode:
        raise CommandError(done.stderr.strip().splitlines()[-1].removeprefix("CommandError: "))
    return done.stdout.strip()
