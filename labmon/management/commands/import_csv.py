"""``manage.py import_csv``: a file's readings into a tap; again changes nothing."""

import json
from argparse import ArgumentParser
from dataclasses import asdict
from pathlib import Path
from typing import Any

from django.core.management.base import CommandError
from django.db import transaction

from ingest.files.faults import FileFault, MappingError
from ingest.files.importing import ImportBusy, ImportCounts, import_file
from ingest.files.mapping import Mapping, mapping_from_toml
from ingest.files.saved import ask_for_import, record_import, saved_mapping
from ingest.models import FileImport, Tap
from labmon.audit.actions import note
from labmon.management.base import LabCommand
from labmon.management.progress_bar import ProgressBar


class Command(LabCommand):
    help = "Read a file's readings into a tap; prints one JSON line of counts. Reading it in again changes nothing."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("file", metavar="FILE", type=Path, help="a table of text; may be packed with gzip")
        parser.add_argument("--station", required=True, metavar="S", help="the station's name")
        parser.add_argument("--tap", required=True, metavar="T", help="the tap's name")
        parser.add_argument("--mapping", type=Path, metavar="FILE.toml",
                            help="what the columns mean (docs/files.md); default: the tap's last mapping")

    def handle(self, *args: Any, **wish: Any) -> str:
        tap = _tap(wish["station"], wish["tap"])
        try:
            return json.dumps(asdict(self._import(tap, wish["file"], _mapping(tap, wish["mapping"]))))
        except MappingError as error:
            raise CommandError(f"The mapping does not fit.\n{error}\ndocs/files.md explains each entry.") from error
        except FileFault as error:
            raise CommandError(f"{wish['file'].name} was not read to its end: {error}.") from error
        except ImportBusy as error:
            raise CommandError(f"{error}.") from error
        except OSError as error:
            raise CommandError(f"{error.filename or wish['file']} cannot be opened: {error.strerror or error}.") from error

    def _import(self, tap: Tap, path: Path, mapping: Mapping) -> ImportCounts:
        bar = ProgressBar(self.stderr._out, "rows")

        def show(record: FileImport) -> None:
            bar.show(record.rows_done, record.rows_total)

        with path.open("rb") as raw:
            record = record_import(tap, path.name, raw)
            ask_for_import(record, mapping)
            counts = import_file(record, raw, on_progress=show)
        bar.show(record.rows_done, record.rows_total, is_last=True)
        with transaction.atomic():
            note(None, "read a file in", tap, None, {"file": record.file_name, "sha256": record.sha256} | asdict(counts))
        return counts


def _tap(station: str, name: str) -> Tap:
    tap = Tap.objects.select_related("station").filter(station__name=station, name=name).first()
    if tap is None:
        there = ", ".join(Tap.objects.filter(station__name=station).order_by("name").values_list("name", flat=True))
        raise CommandError(f"{station}/{name}: no such tap. " + (f"{station} has {there}." if there else
                           f"There is no station {station} with taps; add it with manage.py add_station."))
    return tap


def _mapping(tap: Tap, path: Path | None) -> Mapping:
    if path is None:
        return saved_mapping(tap)
    try:
        text = path.read_text(encoding="utf-8")
    except UnicodeDecodeError as error:
        raise CommandError(f"{path} is not UTF-8 text ({error}). Save it as UTF-8.") from error
    return mapping_from_toml(text, kind=tap.kind, unit=tap.unit)
