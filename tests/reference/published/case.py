"""One published figure and how labmon computes it; the table of docs/published.md is made of these."""

from collections.abc import Callable
from dataclasses import dataclass
from enum import StrEnum


class Origin(StrEnum):
    """How the published figure came to us."""

    READ = "read"
    QUOTED = "read as quoted by an open library or public text"
    LIBRARY = "computed with another library"
    MEMORY = "from memory, derived again"


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """``compute`` calls labmon's public function; the result must lie within ``tolerance`` of ``published`` (same unit)."""

    name: str
    quantity: str
    published: float
    unit: str
    tolerance: float
    formula: str
    source: str
    origin: Origin
    compute: Callable[[], float]
