"""``manage.py verify_store``: is every stored reading still what was written?"""

from argparse import ArgumentParser
from typing import Any

from django.core.management.base import CommandError

from ingest.models import Block, DayFile, InboxRow
from ingest.store.days.check import check_days, faulty_rows, strange_files
from labmon.management.base import LabCommand


class Command(LabCommand):
    help = "Read all stored readings and compare checksums; lists what cannot be read, and ends with 1 if there is any."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("--files-only", action="store_true", help="day files only, not the database's own rows")

    def handle(self, *args: Any, **options: Any) -> str:
        counts = f"{DayFile.objects.count()} day files"
        faults = check_days(older_s=-60.0)
        if not options["files_only"]:
            counts += f", {Block.objects.count()} blocks, {InboxRow.objects.count()} batches"
            faults += faulty_rows()
        for name in strange_files():
            self.stdout.write(f"no row names {name}: not of this lab's present state; look before you remove it")
        for fault in faults:
            self.stdout.write(f"{fault.what}: {fault.why}")
        if faults:
            raise CommandError(f"{len(faults)} of {counts} cannot be read as written. Restore them from a backup "
                               "(docs/operations.md, \"When a day file is damaged\").")
        return f"All well: {counts}."
