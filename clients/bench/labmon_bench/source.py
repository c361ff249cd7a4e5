"""What every source of readings has, and what it says when it has none."""

from __future__ import annotations

from typing import Protocol

from labmon_bench.reading import Reading
from labmon_bench.spool import Place


class SourceFault(Exception):
    """The source gives nothing now ("mute"): what was seen, and what a person can do."""


class OddLine(SourceFault):
    """One line is not as the settings say; the source itself goes on."""


class SourceEnded(Exception):
    """Nothing will ever come from this source again."""


class Source(Protocol):
    """One tap's source; used by one thread, one call at a time."""

    is_awaited: bool
    """``read`` waits by itself for what comes; otherwise it is called at set times."""

    def read(self) -> tuple[list[Reading], Place | None]:
        """What is new, and how far that goes where the source can be read again.

        Raises:
            SourceFault: It gives nothing; call again later.
            SourceEnded: It is over.
        """
        ...

    def kept(self) -> None:
        """What ``read`` gave last is kept; go on from there."""
        ...

    def close(self) -> None:
        """Leave the source; the next ``read`` opens it again."""
        ...
