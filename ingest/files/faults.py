"""What can be wrong with a mapping or a file, in words a person can act on."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class MappingFault:
    """One wrong entry of a mapping."""

    key: str
    value: object
    why: str
    do: str

    def __str__(self) -> str:
        return f"{self.key} = {_shown(self.value)}: {self.why}; {self.do}"


class MappingError(ValueError):
    """A mapping that cannot be used, with every fault found in it."""

    def __init__(self, faults: list[MappingFault]) -> None:
        self.faults = faults
        super().__init__("\n".join(str(fault) for fault in faults))


class FileFault(ValueError):
    """A file that cannot be read on; what was stored before stays."""


@dataclass(frozen=True, slots=True)
class RefusedRow:
    """A line that cannot be used as a reading, as it came.

    ``line`` is its number in the file, counted from 1 as an editor counts.
    """

    line: int
    text: str
    field: str
    why: str
    do: str


def _shown(value: object) -> str:
    if value is None:
        return "(missing)"
    text = f'"{value}"' if isinstance(value, str) else str(value)
    return text if len(text) <= 80 else text[:77] + "…"
