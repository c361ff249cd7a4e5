"""Which rows of a file are held already: by content, never by place (docs/decisions/0040-files-by-content.md)."""

from collections.abc import Mapping as AnyMapping
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

_ODD = np.uint64(0x9E3779B97F4A7C15)               # odd multipliers of Steele, Lea, Flood, OOPSLA 2014 (from memory)
_MIX = np.uint64(0xBF58476D1CE4E5B9)


@dataclass(frozen=True, slots=True)
class Keys:
    """Instant and hash of the values of N rows; equal keys mean equal rows."""

    at_us: IntArray
    content: NDArray[np.uint64]

    def pick(self, which: BoolArray | IntArray) -> "Keys":
        return Keys(self.at_us[which], self.content[which])

    def frame(self) -> pd.DataFrame:
        return pd.DataFrame({"at_us": self.at_us, "content": self.content})


def keys_of(at_us: IntArray, columns: AnyMapping[str, NDArray[np.float64]], names: Sequence[str]) -> Keys:
    """Keys of N rows over the columns ``names``; absent columns count as NaN, -0.0 as 0.0."""
    content = np.zeros(len(at_us), np.uint64)
    for name in names:
        values = columns.get(name)
        values = np.full(len(at_us), np.nan) if values is None else np.where(np.isnan(values), np.nan, values + 0.0)
        content = _mixed(content ^ values.view(np.uint64))
    return Keys(at_us, content)


def _mixed(bits: NDArray[np.uint64]) -> NDArray[np.uint64]:
    with np.errstate(over="ignore"):
        bits = bits * _ODD
        bits ^= bits >> np.uint64(31)
        bits = bits * _MIX
        return bits ^ (bits >> np.uint64(29))


@dataclass(slots=True)
class FileSoFar:
    """The keys of the parts of a file that were read, kept by part so that a sorted file looks back at little."""

    _parts: list[Keys] = field(default_factory=list)

    def add(self, keys: Keys) -> None:
        if len(keys.at_us):
            order = np.argsort(keys.at_us, kind="stable")
            self._parts.append(keys.pick(order))

    def at_instants_of(self, keys: Keys) -> Keys:
        """The earlier rows with an instant that also ``keys`` has."""
        found = [part.pick(np.isin(part.at_us, keys.at_us)) for part in self._parts
                 if len(keys.at_us) and part.at_us[0] <= keys.at_us.max() and part.at_us[-1] >= keys.at_us.min()]
        return Keys(np.concatenate([part.at_us for part in found] or [np.empty(0, np.int64)]),
                    np.concatenate([part.content for part in found] or [np.empty(0, np.uint64)]))


@dataclass(frozen=True, slots=True)
class Verdict:
    """For N rows of a part: held already; or its instant is held from elsewhere with other values. Never both."""

    is_known: BoolArray
    is_contradicted: BoolArray


def judge_part(part: Keys, *, earlier: Keys, held: Keys, held_by_rival: BoolArray) -> Verdict:
    """Which rows of a part of a file are new.

    Args:
        part: The rows, in the file's order.
        earlier: Rows of the same file before this part, at least those at the part's instants.
        held: Readings in the store, at least those at the part's instants.
        held_by_rival: Shape of ``held``: came by another mapping, or by the door without identity of its own.
    """
    in_file = pd.concat([earlier.frame(), part.frame()], ignore_index=True)
    nth = in_file.groupby(["at_us", "content"], sort=False).cumcount().to_numpy()[len(earlier.at_us):]
    is_known = nth < _counts(held, part)
    rivals = held.pick(held_by_rival)
    both = Keys(in_file["at_us"].to_numpy(), in_file["content"].to_numpy())
    is_missed = _counts(both, rivals) < _counts(rivals, rivals)
    return Verdict(is_known, ~is_known & np.isin(part.at_us, rivals.at_us[is_missed]))


def _counts(among: Keys, of: Keys) -> IntArray:
    """How many rows of ``among`` equal each row of ``of``."""
    if not len(among.at_us) or not len(of.at_us):
        return np.zeros(len(of.at_us), np.int64)
    sizes = among.frame().groupby(["at_us", "content"], sort=False).size().rename("count").reset_index()
    return of.frame().merge(sizes, how="left", on=["at_us", "content"])["count"].fillna(0).to_numpy().astype(np.int64)
