"""Reference values of all *.json beside this file, by id; where each comes from is in SOURCES.md."""

import json
from functools import cache
from pathlib import Path
from typing import Any

HERE = Path(__file__).parent


@cache
def _all() -> dict[str, dict[str, Any]]:
    found: dict[str, dict[str, Any]] = {}
    for path in sorted(HERE.glob("*.json")):
        for row in json.loads(path.read_text("utf-8")):
            if row["id"] in found:
                raise ValueError(f"{path.name}: id {row['id']!r} is given twice; a value is kept once, in one file.")
            found[row["id"]] = row
    return found


def reference(name: str) -> dict[str, Any]:
    """One value: ``inputs``, ``expected``, ``tolerance``, ``units``, ``source``."""
    return _all()[name]


def references(prefix: str) -> list[dict[str, Any]]:
    """All values whose id begins so; never empty, so that a test over them cannot pass by finding none."""
    found = [row for name, row in _all().items() if name.startswith(prefix)]
    if not found:
        raise KeyError(f"no reference value begins with {prefix!r}.")
    return found


def close(row: dict[str, Any]) -> dict[str, float]:
    """The value's tolerance as keyword arguments of `numpy.testing.assert_allclose`."""
    kind, value = row["tolerance"]["kind"], row["tolerance"]["value"]
    return {"rtol": value, "atol": 0.0} if kind == "rel" else {"rtol": 0.0, "atol": value}
