"""Writes docs/published.md: python -m tests.reference.published.table (``make published``)."""

import importlib
import math
import pkgutil
import sys
from pathlib import Path

import tests.reference.published as package
from tests.reference.published.case import Case

PAGE = Path(__file__).parents[3] / "docs" / "published.md"
HEAD = """# Computed and published values

Made by `make published` from the cases in `tests/reference/published/`; a test compares each one and holds this page to them.
*Difference* is computed − published; below a billionth of the value (or of one unit) it reads 0. F-numbers: `formulas.md`.
"""


def cases_by_topic() -> dict[str, list[Case]]:
    """Topic (first line of the module's docstring) → its cases, in the order of the modules' names."""
    found = {}
    for entry in pkgutil.iter_modules(package.__path__):
        module = importlib.import_module(f"{package.__name__}.{entry.name}")
        if hasattr(module, "CASES"):
            found[str(module.__doc__).splitlines()[0].rstrip(".")] = list(module.CASES)
    return found


def page() -> str:
    """The whole page as Markdown."""
    parts = [HEAD]
    for topic, cases in cases_by_topic().items():
        parts.append(f"\n## {topic}\n\n| quantity | published | computed | difference | allowed | formula | source |\n"
                     "|---|---|---|---|---|---|---|\n")
        parts.extend(_row(case) for case in cases)
    return "".join(parts)


def _row(case: Case) -> str:
    computed = float(case.compute())
    return (f"| {case.quantity} | {case.published:.7g} {case.unit} | {computed:.7g} {case.unit} | "
            f"{_difference(computed, case.published)} | ±{case.tolerance:.2g} | {case.formula} | "
            f"{case.source} ({case.origin}) |\n")


def _difference(computed: float, published: float) -> str:
    difference = computed - published
    if math.isnan(difference):
        return "–"
    return "0" if abs(difference) <= 1e-9 * max(1.0, abs(published)) else f"{difference:+.1e}"


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8")
    sys.stdout.write(f"{PAGE.name}: {sum(map(len, cases_by_topic().values()))} values\n")
