"""What a backup holds: one list of files with sizes and SHA-256, written last, verified first."""

import hashlib
import json
from collections.abc import Iterator
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, Final

NAME: Final = "manifest.json"
FORM: Final = "labmon backup 1"


class BackupFault(Exception):
    """A backup cannot be made or used; the message says why and what to do."""


@dataclass(frozen=True, slots=True)
class Manifest:
    """The list of a backup.

    Attributes:
        files: Path within the backup: (bytes, SHA-256 in hexadecimal).
        postgres: Major version of the programs that wrote the dump.
    """

    made_at: str
    postgres: int
    files: dict[str, tuple[int, str]]

    def write(self, folder: Path) -> None:
        """Whole or not at all: a folder without it is no backup."""
        part = folder / f".{NAME}.part"
        part.write_text(json.dumps({"form": FORM} | asdict(self), indent=1, sort_keys=True) + "\n")
        part.rename(folder / NAME)


def read_manifest(folder: Path) -> Manifest:
    """The list of the backup in a folder.

    Raises:
        BackupFault: There is none, or it is of another form.
    """
    try:
        said: dict[str, Any] = json.loads((folder / NAME).read_text())
    except FileNotFoundError:
        raise BackupFault(f"{folder} is no backup: it has no {NAME}. A backup that was broken off has none; "
                          "use another.") from None
    except ValueError as error:
        raise BackupFault(f"{folder / NAME} cannot be read ({error}). Use another backup.") from None
    if said.get("form") != FORM:
        raise BackupFault(f"{folder / NAME} is of form {said.get('form')!r}; this program reads {FORM!r}.")
    return Manifest(said["made_at"], said["postgres"], {name: (size, digest) for name, (size, digest) in said["files"].items()})


def faults_in(folder: Path, manifest: Manifest) -> Iterator[str]:
    """What in the folder is not as the list says."""
    for name, (size, digest) in manifest.files.items():
        path = folder / name
        if not path.is_file():
            yield f"{name} is missing"
        elif path.stat().st_size != size or digest_of(path)[1] != digest:
            yield f"{name} is not what was written"


def digest_of(path: Path) -> tuple[int, str]:
    """Bytes and SHA-256 of a file."""
    digest, size = hashlib.sha256(), 0
    with path.open("rb") as file:
        while part := file.read(1 << 20):
            digest.update(part)
            size += len(part)
    return size, digest.hexdigest()
