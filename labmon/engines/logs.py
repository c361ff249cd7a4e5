"""Keeps the logs of the data folder small; the processes go on writing to the same open file."""

import shutil
from pathlib import Path

LARGEST_BYTES = 20 * 2**20


def trim_logs(folder: Path, largest_bytes: int = LARGEST_BYTES) -> None:
    """Copy each log that has grown too large to ``NAME.log.1`` and empty it (its writers append)."""
    for path in folder.glob("*.log"):
        if path.stat().st_size > largest_bytes:
            shutil.copyfile(path, path.with_name(path.name + ".1"))
            with path.open("r+b") as file:
                file.truncate(0)
