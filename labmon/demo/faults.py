"""What can be done to the invented lab's data: each kind of fault as a frozen row of figures.

Times are seconds since day 1 (see ``moments``). A fault says what happens and to whom; the physics (``air``, ``source``,
``paths``, ``ports``) and the sending (``sending``) ask the ledger for the rows that concern them.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True)
class Fault:
    """One row of the ledger: when, to whom, and the label a good judge gives it."""

    subjects: tuple[str, ...]
    start_s: float
    end_s: float = float("inf")
    expected: str = ""

    def lasts(self, at_s: FloatArray) -> BoolArray:
        """Where the times lie in [start, end)."""
        return (at_s >= self.start_s) & (at_s < self.end_s)


@dataclass(frozen=True, slots=True, kw_only=True)
class AirFault(Fault):
    """A room's air unit fails: the target temperature rises by ``rise_k``."""

    rise_k: float


@dataclass(frozen=True, slots=True, kw_only=True)
class RoomLight(Fault):
    """Lamps add the same power to both ports of unshielded benches."""

    added_w: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Touch(Fault):
    """A fibre is touched: the state jumps by ``peak_deg`` on the sphere, rings down, and stays off by ``stays_deg``."""

    peak_deg: float
    stays_deg: float = 0.0
    hold_s: float = 0.0
    rise_s: float = 0.4
    ring_down_s: float = 40.0

    def angle_rad(self, at_s: FloatArray) -> FloatArray:
        """Displacement on the sphere, rad, shape (N,): linear rise, hold, exponential ring-down to what stays."""
        since = at_s - self.start_s
        rise = np.clip(since / self.rise_s, 0.0, 1.0)
        fall = np.exp(-np.maximum(since - self.rise_s - self.hold_s, 0.0) / self.ring_down_s)
        settled = self.stays_deg + (self.peak_deg - self.stays_deg) * fall
        return np.where(at_s < self.end_s, np.radians(rise * settled), 0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class ModeHops(Fault):
    """A laser hops: its power steps by ``power_share`` and each bench's leak by a factor, once per hop."""

    hops: tuple[tuple[float, float], ...]
    power_share: float
    leak_factors: tuple[tuple[str, tuple[float, ...]], ...]

    def power_factor(self, at_s: FloatArray) -> FloatArray:
        """Factor on the power, shape (N,)."""
        hopped = np.zeros(len(at_s), bool)
        for start, end in self.hops:
            hopped |= (at_s >= start) & (at_s < end)
        return np.where(hopped, 1.0 + self.power_share, 1.0)

    def leak_factor(self, bench: str, at_s: FloatArray) -> FloatArray:
        """Factor on a bench's leak, shape (N,)."""
        factor = np.ones(len(at_s))
        for (start, end), value in zip(self.hops, dict(self.leak_factors).get(bench, ()), strict=False):
            factor[(at_s >= start) & (at_s < end)] = value
        return factor


@dataclass(frozen=True, slots=True, kw_only=True)
class JointCreep(Fault):
    """A PM joint creeps: the mean ER sinks, linear in dB, and stays where it ends; the phase goes on cycling.

    ``end_s`` is the end of the sinking, not of the damage.
    """

    from_db: float
    to_db: float

    def mean_leak(self, at_s: FloatArray) -> FloatArray:
        """Phase-averaged leak, shape (N,)."""
        share = np.clip((at_s - self.start_s) / (self.end_s - self.start_s), 0.0, 1.0)
        return 10.0 ** (-(self.from_db + (self.to_db - self.from_db) * share) / 10.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class SourceAgeing(Fault):
    """A laser loses ``share_per_day`` of its first power each day until it is replaced (``end_s``)."""

    share_per_day: float

    def power_factor(self, at_s: FloatArray) -> FloatArray:
        """Factor on the power, shape (N,)."""
        days = np.maximum(at_s - self.start_s, 0.0) / 86_400.0
        return np.where(at_s < self.end_s, 1.0 - self.share_per_day * days, 1.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class SourceOff(Fault):
    """A laser is off."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PowerRaised(Fault):
    """Somebody turns a laser up by ``factor``."""

    factor: float


@dataclass(frozen=True, slots=True, kw_only=True)
class PortFrozen(Fault):
    """A port's value stays what it was, while the rest of the station goes on."""

    port: int


@dataclass(frozen=True, slots=True, kw_only=True)
class HumAlias(Fault):
    """Mains ripple, no longer averaged over whole cycles, appears as a slow wave on a port."""

    port: int
    share: float
    period_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class HandednessFlipped(Fault):
    """A polarimeter's software changes its sign of S3."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ClockOffset(Fault):
    """A station restarts with its clock ahead by ``offset_s``."""

    offset_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Restart(Fault):
    """A station restarts: nothing for ``gap_s``, then a clock at 1970 for ``unset_s``; perhaps new firmware."""

    gap_s: float
    unset_s: float = 0.0
    firmware: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class NetworkOutage(Fault):
    """Rooms without network: stations keep what their buffer holds and send it afterwards."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SecondDevice(Fault):
    """A spare board sends with another station's key: a dark board beside the real one."""


@dataclass(frozen=True, slots=True, kw_only=True)
class NightFails(Fault):
    """A walking bench loses its alignment in the night that begins on this day."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Deed(Fault):
    """Something people do; the readings do not show it."""

    what: str


Kind = TypeVar("Kind", bound=Fault)


@dataclass(frozen=True, slots=True)
class Ledger:
    """All faults of a lab."""

    rows: tuple[Fault, ...]

    def of(self, kind: type[Kind], *subjects: str) -> list[Kind]:
        """Rows of one kind that concern any of ``subjects`` (a bench, a room, a laser, a person)."""
        return [row for row in self.rows if isinstance(row, kind) and set(row.subjects) & set(subjects)]

    def with_rows(self, more: Iterable[Fault]) -> "Ledger":
        """This ledger and more rows."""
        return Ledger((*self.rows, *more))
