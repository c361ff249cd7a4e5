"""``manage.py backup FOLDER``: a whole copy of the lab, made while it runs."""

from argparse import ArgumentParser
from pathlib import Path
from typing import Any

from django.core.management.base import CommandError

from labmon.backup.make import about, make_backup
from labmon.backup.manifest import BackupFault
from labmon.engines.faults import EngineFault
from labmon.management.base import LabCommand


class Command(LabCommand):
    help = "Write database, day files, uploaded files and secret key into a new folder, with a list and checksums."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("folder", type=Path, metavar="FOLDER", help="new or empty; keep it as secret as the lab")

    def handle(self, *args: Any, **options: Any) -> str:
        try:
            return about(make_backup(options["folder"].absolute(), self.stderr.write))
        except (BackupFault, EngineFault) as fault:
            raise CommandError(str(fault)) from fault
