"""``manage.py verify_evidence FILE``: is an evidence package what was made, and does its ledger follow from its readings?"""

from argparse import ArgumentParser
from pathlib import Path
from typing import Any

from django.conf import settings
from django.core.management.base import CommandError
from django.db import OperationalError

from labmon.evidence.files import digest_of
from labmon.evidence.verify import NoPackage, known_here, verify_file
from labmon.management.base import LabCommand


class Command(LabCommand):
    help = ("Check an evidence package: digests, and the ledger recomputed from its raw readings, second by second. "
            "Ends with 1 where anything differs. Needs no running lab; where one runs, it says whether the package is its own.")
    needs_database = False

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("file", type=Path, help="the package (ZIP)")

    def handle(self, *args: Any, **options: Any) -> str:
        path: Path = options["file"]
        if not path.is_file():
            raise CommandError(f"{path} is no file. Give the package's ZIP.")
        try:
            found = verify_file(path)
        except NoPackage as fault:
            raise CommandError(str(fault)) from None
        for line in (*found.faults, *found.remarks, self._known(path)):
            self.stdout.write(line)
        if found.faults:
            raise CommandError(f"{len(found.faults)} differences: this is not what labmon made.")
        totals = [f"{name.removesuffix('_s').replace('_', ' ')} {value} s" for name, value in found.totals.items()]
        return f"All agrees, to the second: {', '.join(totals)}."

    def _known(self, path: Path) -> str:
        digest = digest_of(path)
        try:
            row = known_here(digest) if settings.HAS_SERVICES else None
        except OperationalError:
            row = None
        if row is None:
            return f"SHA-256 {digest}: not known here (no lab is running, it was made elsewhere, or it was changed)."
        return (f"SHA-256 {digest}: made here for run {row.run_id}, version {row.ledger.number} of its ledger, "
                f"{row.made_at:%Y-%m-%d}.")
