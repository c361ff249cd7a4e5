"""A tap's saved mapping, and the record of each file read in."""

import hashlib
import zlib
from pathlib import PurePath
from typing import Any, BinaryIO

from ingest.files.faults import MappingError, MappingFault
from ingest.files.lines import opened
from ingest.files.mapping import COUNTED, Mapping, mapping_of, rules_of
from ingest.models import ColumnMapping, FileImport, Tap

_BYTES_AT_ONCE = 1 << 20


def save_mapping(tap: Tap, mapping: Mapping) -> None:
    """Keep the mapping for the tap's next file."""
    ColumnMapping.objects.update_or_create(tap=tap, defaults={"rules": rules_of(mapping)})


def saved_rules(tap: Tap) -> dict[str, Any] | None:
    """The rules of the tap's last mapping; a counted time's start is left out, for each file has its own."""
    kept = ColumnMapping.objects.filter(tap=tap).first()
    if kept is None:
        return None
    rules = kept.rules | {"time": dict(kept.rules.get("time", {}))}
    if rules["time"].get("format") in COUNTED:
        rules["time"].pop("since", None)
    return rules


def saved_mapping(tap: Tap) -> Mapping:
    """The tap's saved mapping.

    Raises:
        MappingError: There is none, or it counts from a start that each file has anew.
    """
    rules = saved_rules(tap)
    if rules is None:
        raise MappingError([MappingFault("mapping", None, f"none is saved for tap {tap.name}", "give one: --mapping FILE.toml")])
    return mapping_of(rules, kind=tap.kind, unit=tap.unit)


def record_import(tap: Tap, file_name: str, raw: BinaryIO) -> FileImport:
    """A record of a file that may be read in; ``rows_total`` is the number of its lines until the rows are counted."""
    sha256 = hashlib.sha256()
    while piece := raw.read(_BYTES_AT_ONCE):
        sha256.update(piece)
    raw.seek(0)
    return FileImport.objects.create(tap=tap, file_name=PurePath(file_name).name[:255] or "file", sha256=sha256.hexdigest(),
                                     rows_total=_line_count(raw))


def _line_count(raw: BinaryIO) -> int:
    count = 0
    try:
        unpacked = opened(raw)
        while piece := unpacked.read(_BYTES_AT_ONCE):
            count += piece.count(b"\n")
    except (EOFError, OSError, zlib.error):
        pass                                       # the import itself says where the file is damaged
    finally:
        raw.seek(0)
    return count


def ask_for_import(record: FileImport, mapping: Mapping) -> None:
    """Fix the mapping the file is read in with, and keep it for the tap."""
    record.rules = rules_of(mapping)
    record.save(update_fields=["rules"])
    save_mapping(record.tap, mapping)
