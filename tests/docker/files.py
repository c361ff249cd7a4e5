"""The container files, parsed."""

import re
from pathlib import Path
from typing import Any

import yaml

PROJECT = Path(__file__).resolve().parents[2]
FOLDER = PROJECT / "docker"


def compose() -> dict[str, Any]:
    """compose.yaml with its shared parts merged in."""
    return yaml.safe_load((FOLDER / "compose.yaml").read_text())


def dockerfile() -> list[tuple[str, str]]:
    """Instructions and their words, continued lines joined."""
    text = re.sub(r"\\\n", " ", (FOLDER / "Dockerfile").read_text())
    lines = [line.strip() for line in text.splitlines() if line.strip() and not line.lstrip().startswith("#")]
    return [(line.split(None, 1)[0], " ".join(line.split(None, 1)[1].split())) for line in lines]


def env_example() -> dict[str, tuple[str, str]]:
    """Variable → (comment above it, value), whether set or commented out."""
    found: dict[str, tuple[str, str]] = {}
    comment: list[str] = []
    for line in (FOLDER / "env.example").read_text().splitlines():
        variable = re.fullmatch(r"#?([A-Z][A-Z0-9_]*)=(.*)", line)
        if variable:
            found[variable[1]] = " ".join(comment), variable[2]
            comment = []
        elif line.startswith("# "):
            comment.append(line[2:])
        else:
            comment = []
    return found
