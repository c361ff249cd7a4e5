"""Where day files lie: Django's storage "days", by default a folder in which a file is there whole or not at all."""

import os
import secrets
from pathlib import Path
from typing import Any

from django.core.files.base import File
from django.core.files.storage import FileSystemStorage, Storage, storages

ALIAS = "days"


def days_storage() -> Storage:
    """The storage of day files, as the settings name it."""
    return storages[ALIAS]


class DayFolder(FileSystemStorage):
    """A folder on a disk: written under a temporary name, synchronised, then renamed; the folder is synchronised too."""

    def _save(self, name: str, content: File) -> str:
        path = Path(self.path(name))
        self._make_folders(path.parent)
        if path.exists():
            raise FileExistsError(f"{name}: a day file is never written twice; its name has a part of its own.")
        part = path.with_name(f".{path.name}.{secrets.token_hex(4)}.part")
        try:
            with open(part, "xb") as sink:
                for chunk in content.chunks():
                    sink.write(chunk)
                sink.flush()
                os.fsync(sink.fileno())
            part.rename(path)
        finally:
            part.unlink(missing_ok=True)
        _sync(path.parent)
        return name

    def get_available_name(self, name: str, max_length: int | None = None) -> str:
        """The name as given: day files have names of their own, and no other must come about silently."""
        return name

    def delete(self, name: str) -> None:
        """Remove a file, and parts of it that a killed process left."""
        super().delete(name)
        path = Path(self.path(name))
        for part in path.parent.glob(f".{path.name}.*.part"):
            part.unlink(missing_ok=True)

    def _make_folders(self, folder: Path) -> None:
        if not folder.is_dir():
            self._make_folders(folder.parent)
            folder.mkdir(mode=0o700, exist_ok=True)
            _sync(folder.parent)


def _sync(folder: Path) -> None:
    """Names in a folder are on the disk once the folder itself is synchronised."""
    held = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(held)
    finally:
        os.close(held)


def read_exactly(file: Any, place: int, view: memoryview) -> int:
    """Fill ``view`` from ``place`` on; the number of bytes there were."""
    file.seek(place)
    done = 0
    while done < len(view):
        part = file.read(len(view) - done)
        if not part:
            break
        view[done:done + len(part)] = part
        done += len(part)
    return done
