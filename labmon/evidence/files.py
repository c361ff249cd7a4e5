"""Where packages lie: below the data folder, one folder a run."""

import hashlib
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import BinaryIO

from django.conf import settings

from labmon.evidence.models import RunEvidence

PART = 1 << 20


def place_of(evidence: RunEvidence) -> Path:
    """The package's file, there or not."""
    return Path(settings.MEDIA_ROOT) / "evidence" / str(evidence.run_id) / f"{name_of(evidence)}.zip"


def name_of(evidence: RunEvidence) -> str:
    """The package's name, and the folder that it unpacks to."""
    return f"labmon-run-{evidence.run_id}-evidence-{evidence.number}"


@contextmanager
def new_file(path: Path) -> Iterator[BinaryIO]:
    """A file that appears under its name only when it is whole and on disk."""
    path.parent.mkdir(parents=True, exist_ok=True)
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with part.open("w+b") as file:
            yield file
            file.flush()
            os.fsync(file.fileno())
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)


def digest_of(path: Path) -> str:
    """SHA-256 of a file, in hexadecimal."""
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while part := file.read(PART):
            digest.update(part)
    return digest.hexdigest()
