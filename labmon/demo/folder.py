"""What the demo keeps in the data folder: station keys, demo-only passwords, and where its time axis begins."""

import json
import os
from dataclasses import asdict, dataclass, field
from pathlib import Path

from django.conf import settings


@dataclass(slots=True, kw_only=True)
class DemoNotes:
    """The demo's own notes; they hold keys and passwords, so the file is readable by its owner only."""

    day_one_us: int
    seed: int
    built_until_us: int = 0
    is_built: bool = False
    passwords: dict[str, str] = field(default_factory=dict)
    station_keys: dict[str, str] = field(default_factory=dict)


def notes_path() -> Path:
    """Where the notes lie."""
    return settings.DATA_DIR / "demo" / "notes.json"


def read_notes() -> DemoNotes | None:
    """The notes of this data folder; None where no demo was built."""
    path = notes_path()
    return DemoNotes(**json.loads(path.read_text())) if path.is_file() else None


def write_notes(notes: DemoNotes) -> None:
    """Keep the notes: mode 0600, replaced as a whole."""
    path = notes_path()
    path.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
    part = path.with_suffix(".part")
    descriptor = os.open(part, os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600)
    with os.fdopen(descriptor, "w") as file:
        json.dump(asdict(notes), file, indent=1)
        file.flush()
        os.fsync(file.fileno())
    part.replace(path)
