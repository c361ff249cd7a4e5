"""One tap's raw readings as columns: what every other part gets to see of the store."""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, fields, replace
from typing import Any

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]
ObjectArray = npt.NDArray[np.object_]

NO_TIME: int = int(np.iinfo(np.int64).min)
NO_SEQUENCE = -1


@dataclass(frozen=True, slots=True)
class Readings:
    """Raw readings of one tap, sorted by (at_us, boot_id, sequence), each once.

    Times are microseconds since 1970 UTC. Values are as sent: no zero taken off, no gain applied, in the tap's unit.
    """

    at_us: IntArray
    """Where labmon placed the reading on the time axis, shape (N,)."""
    columns: dict[str, FloatArray]
    """By column name, shape (N,), NaN where absent; ``clipped`` as 0 and 1; unknown columns are not here."""
    boot_id: IntArray
    """Row id of the TapBoot, shape (N,)."""
    sequence: IntArray
    """Shape (N,), -1 where none."""
    own_at_us: IntArray
    """The station's own stamp, NO_TIME where none, shape (N,)."""
    arrival_us: IntArray
    """When the batch came in, by the server's clock, shape (N,)."""
    sent_us: IntArray
    """When the batch was sent, on the axis of ``at_us``: the reading's lateness is ``sent_us - at_us``, shape (N,)."""
    is_server_timed: BoolArray
    """The station's own clock was not used, shape (N,)."""
    unknown: ObjectArray | None = field(default=None)
    """Columns nobody knows, one JSON object as text per reading ("" where none), or None where no reading has any."""

    def __len__(self) -> int:
        return len(self.at_us)

    @property
    def lateness_us(self) -> IntArray:
        """Age of each reading when it was sent, by the station's own clock, shape (N,); see CONTRACT.md section 1."""
        return self.sent_us - self.at_us

    def pick(self, which: Any) -> "Readings":
        """The readings of a slice, a mask or an index array, in that order."""
        return self._mapped(lambda array: array[which])

    def between(self, from_us: int, until_us: int) -> "Readings":
        """The readings of the half-open span."""
        first, last = np.searchsorted(self.at_us, [from_us, until_us])
        return self if first == 0 and last == len(self) else self.pick(slice(int(first), int(last)))

    def column(self, name: str) -> FloatArray:
        """The named column, all NaN where the tap never sent it, shape (N,)."""
        found = self.columns.get(name)
        return np.full(len(self), np.nan) if found is None else found

    def sorted(self) -> "Readings":
        """The same readings in the order of (at_us, boot_id, sequence)."""
        if len(self) < 2 or bool((self.at_us[1:] > self.at_us[:-1]).all()):
            return self
        return self.pick(np.lexsort((self.sequence, self.boot_id, self.at_us)))

    def _mapped(self, change: Callable[[Any], Any]) -> "Readings":
        others = {each.name: change(getattr(self, each.name)) for each in fields(self)
                  if each.name not in {"columns", "unknown"}}
        return replace(self, columns={name: change(values) for name, values in self.columns.items()},
                       unknown=None if self.unknown is None else change(self.unknown), **others)


def no_readings(columns: Sequence[str] | None = None) -> Readings:
    """Readings of length 0."""
    empty = np.empty(0, np.int64)
    return Readings(empty, {name: np.empty(0) for name in columns or ()}, empty, empty, empty, empty, empty,
                    np.empty(0, np.bool_))


def narrowed(readings: Readings) -> Readings:
    """The same with columns as float32 where every value stays what it is to the last bit; others stay as they are."""
    return replace(readings, columns={name: _narrowed(values) for name, values in readings.columns.items()})


def _narrowed(values: npt.NDArray[Any]) -> npt.NDArray[Any]:
    if values.dtype != np.float64:
        return values
    with np.errstate(over="ignore", invalid="ignore"):
        narrow = values.astype(np.float32)
        is_same = bool((narrow.astype(np.float64).view(np.int64) == np.ascontiguousarray(values).view(np.int64)).all())
    return narrow if is_same else values


def concatenate(parts: Iterable[Readings]) -> Readings:
    """The parts one after the other (not sorted); a column that a part lacks is NaN there."""
    filled = [part for part in parts if len(part)]
    if len(filled) <= 1:
        return filled[0] if filled else no_readings()
    plain = {each.name: np.concatenate([getattr(part, each.name) for part in filled]) for each in fields(Readings)
             if each.name not in {"columns", "unknown"}}
    names = dict.fromkeys(name for part in filled for name in part.columns)
    columns = {name: np.concatenate([part.column(name) for part in filled]) for name in names}
    unknown = None
    if any(part.unknown is not None for part in filled):
        unknown = np.concatenate([np.full(len(part), "", object) if part.unknown is None else part.unknown
                                  for part in filled])
    return Readings(columns=columns, unknown=unknown, **plain)
