"""Files read in in the background; every step may run twice."""

import logging
from datetime import timedelta
from typing import BinaryIO

from celery import shared_task
from django.core.files.base import File
from django.core.files.storage import default_storage
from django.db import OperationalError as DatabaseAway
from django.db import transaction
from django.utils import timezone
from kombu.exceptions import OperationalError

from ingest.files.faults import FileFault, MappingError
from ingest.files.importing import ImportBusy, import_file
from ingest.files.mapping import Mapping
from ingest.files.saved import ask_for_import
from ingest.models import FileImport
from labmon.audit.actions import note
from labmon.live.publish import publish
from labmon.people.models import Person

log = logging.getLogger(__name__)

ROWS_AT_ONCE = 20_000
LEFT_AFTER = timedelta(minutes=10)
FORGOTTEN_AFTER = timedelta(days=1)


def place_of(record: FileImport) -> str:
    """Where the upload of a record lies in the file storage: by content, so that two uploads of one file are one."""
    return f"imports/{record.sha256}"


def keep_upload(record: FileImport, raw: BinaryIO) -> None:
    """Keep an uploaded file until it is read in."""
    if not default_storage.exists(place_of(record)):
        default_storage.save(place_of(record), File(raw))


def begin_import(record: FileImport, mapping: Mapping, *, by: Person) -> None:
    """Read a small file in at once, a large one in the background."""
    with transaction.atomic():
        ask_for_import(record, mapping)
        note(by, "read a file in", record.tap, None, {"file": record.file_name, "sha256": record.sha256, "mapping": record.rules})
    if (record.rows_total or 0) <= ROWS_AT_ONCE:
        try:
            import_upload(record.pk)
        except ImportBusy:
            ask_worker(record.pk)
    else:
        ask_worker(record.pk)


def import_upload(import_id: int) -> None:
    """Read an uploaded file in, tell the pages, and let the upload go; done or unknown ones change nothing."""
    record = FileImport.objects.select_related("tap").filter(pk=import_id, rules__isnull=False, finished_at=None).first()
    if record is None:
        return
    try:
        with default_storage.open(place_of(record), "rb") as kept:
            import_file(record, kept.file, on_progress=_tell)
    except FileNotFoundError:
        record.error, record.finished_at = "the upload is gone; send the file again", timezone.now()
        record.save(update_fields=["error", "finished_at"])
    except (MappingError, FileFault) as fault:
        log.warning("import_stopped", extra={"import_id": import_id, "why": str(fault)[:200]})
    _tell(record)
    forget_upload(record)


def forget_upload(record: FileImport) -> None:
    """Delete the upload unless another record still waits for it."""
    if not FileImport.objects.filter(sha256=record.sha256, finished_at=None).exclude(pk=record.pk).exists():
        default_storage.delete(place_of(record))


def forget_old_uploads() -> int:
    """Close uploads that nobody asked to read in for a day; how many."""
    old = list(FileImport.objects.filter(rules__isnull=True, finished_at=None, started_at__lt=timezone.now() - FORGOTTEN_AFTER))
    for record in old:
        record.error, record.finished_at = "nobody asked to read it in for a day; the upload was let go", timezone.now()
        record.save(update_fields=["error", "finished_at"])
        forget_upload(record)
    return len(old)


def ask_worker(import_id: int) -> None:
    """Hint to the worker after commit; without a broker the sweep finds the record."""

    def ask() -> None:
        try:
            import_upload_task.delay(import_id)
        except OperationalError as fault:  # kombu's: the broker is away
            log.warning("import_hint_failed", extra={"import_id": import_id, "fault": str(fault)})

    transaction.on_commit(ask, robust=True)


@shared_task(
    name="labmon.pipeline.import_upload",
    acks_late=True,
    ignore_result=True,
    time_limit=300,
    autoretry_for=(DatabaseAway, ImportBusy),
    retry_backoff=5,
    max_retries=20,
)
def import_upload_task(import_id: int) -> None:
    """Safe to run twice: rows are known by content."""
    import_upload(import_id)


@shared_task(name="labmon.pipeline.take_up_left_imports", ignore_result=True, time_limit=60)
def take_up_left_imports_task() -> None:
    """Imports that were asked for and that no task finished (a lost hint, a killed worker)."""
    left = FileImport.objects.filter(rules__isnull=False, finished_at=None, started_at__lt=timezone.now() - LEFT_AFTER)
    for import_id in left.values_list("pk", flat=True):
        import_upload_task.delay(import_id)
    forget_old_uploads()


def _tell(record: FileImport) -> None:
    publish({"kind": "import", "ids": [record.pk]})
