"""Under which boot the rows of files are held; the numbers only keep rows apart (docs/decisions/0040-files-by-content.md)."""

import hashlib
import json

from django.db import connection

from ingest.files.mapping import Mapping, rules_of
from ingest.models import Tap, TapBoot

FILE_BOOT = "file-"


def boot_of(mapping: Mapping) -> str:
    """``file-`` and a digest of what decides times and values: the same for every layout of the text."""
    rules = rules_of(mapping)
    text = json.dumps([rules["time"], rules["columns"]], sort_keys=True)
    return FILE_BOOT + hashlib.blake2b(text.encode(), digest_size=8).hexdigest()


def is_from_file(boot: str) -> bool:
    """Whether a station boot is no device's life but a mapping of files."""
    return boot.startswith(FILE_BOOT)


def rival_boots(tap: Tap, boot: str) -> list[int]:
    """TapBoot ids whose readings at an instant speak against another value there: other mappings, or no identity."""
    boots = TapBoot.objects.filter(tap=tap).exclude(station_boot__boot=boot)
    return [pk for pk, name in boots.values_list("pk", "station_boot__boot") if not name or is_from_file(name)]


def next_sequence(tap: Tap, boot: str) -> int:
    """One above the highest number given out."""
    with connection.cursor() as cursor:
        cursor.execute("""
            SELECT coalesce(max(upper(held)), 0) FROM ingest_tapboot
            JOIN ingest_stationboot ON ingest_stationboot.id = station_boot_id
            WHERE tap_id = %s AND boot = %s""", [tap.pk, boot])
        return int(cursor.fetchone()[0])
