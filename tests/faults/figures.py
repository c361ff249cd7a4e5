"""The fault table: what was done to the lab, and what became of the readings; printed when the tests are over."""

from collections import Counter
from collections.abc import Hashable, Iterable
from dataclasses import dataclass

HEAD = ("fault", "what was done", "sent", "stored", "doubled", "lost", "calls", "recovered after", "also")


@dataclass(frozen=True, slots=True)
class Balance:
    """Readings sent and stored, compared as whole rows: identity, time and values to the last bit.

    Attributes:
        doubled: Rows stored more often than once. ``lost``: sent and not stored. ``strange``: stored and never sent.
    """

    sent: int
    stored: int
    doubled: int
    lost: int
    strange: int

    @property
    def is_exact(self) -> bool:
        """True where the stored set is the sent set, each once."""
        return self.sent == self.stored and self.doubled == self.lost == self.strange == 0

    def __add__(self, other: "Balance") -> "Balance":
        return Balance(self.sent + other.sent, self.stored + other.stored, self.doubled + other.doubled, self.lost + other.lost,
                       self.strange + other.strange)


def balance_of(sent: Iterable[Hashable], stored: Iterable[Hashable]) -> Balance:
    """Compare what was sent (each once) with what is stored."""
    wanted, found = set(sent), Counter(stored)
    return Balance(len(wanted), found.total(), sum(count - 1 for count in found.values()), len(wanted - found.keys()),
                   len(found.keys() - wanted))


_rows: list[tuple[str, ...]] = []


def note_fault(fault: str, done: str, balance: Balance, *, calls: int | str = "-", recovered: str = "-", also: str = "") -> None:
    """A row of the table."""
    _rows.append((fault, done, *(f"{count:,}" for count in (balance.sent, balance.stored, balance.doubled, balance.lost)),
                  str(calls), recovered, also))


def table_lines() -> list[str]:
    """The table in Markdown; nothing where no fault was noted."""
    if not _rows:
        return []
    return [f"| {' | '.join(row)} |" for row in (HEAD, ("---",) * len(HEAD), *_rows)]
