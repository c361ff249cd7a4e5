"""The air of the invented lab's rooms."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from labmon.demo.faults import AirFault, Ledger
from labmon.demo.moments import DAY_S
from labmon.demo.seeds import white_per_day

FloatArray = NDArray[np.float64]
GRID_S = 10.0
PER_DAY = int(DAY_S / GRID_S)
LEAD_DAYS = 2
"""Days simulated before day 1, so that all filters have settled."""
NIGHT_STARTS_H, NIGHT_ENDS_H = 20, 6


@dataclass(frozen=True, slots=True, kw_only=True)
class RoomPlan:
    """What a room's air does: a cycle of the air unit, a night setback, draughts by day."""

    name: str
    station: str
    mean_c: float
    cycle_k: float
    cycle_s: float
    setback_k: float = 0.0
    draught_k: float = 0.02
    slow_k: float = 0.08
    answer_s: float = 1500.0


ROOMS = (
    RoomPlan(name="North Hall", station="air-north-hall", mean_c=21.6, cycle_k=0.35, cycle_s=22 * 60.0),
    RoomPlan(name="South Hall", station="air-south-hall", mean_c=21.0, cycle_k=0.15, cycle_s=38 * 60.0, setback_k=-1.2),
    RoomPlan(name="Vault", station="air-vault", mean_c=20.4, cycle_k=0.03, cycle_s=31 * 60.0, draught_k=0.002, slow_k=0.01),
)


def relaxed(target: FloatArray, time_constant_s: float) -> FloatArray:
    """First-order answer to a target on the grid, started in balance: shape (N,) in and out."""
    share = 1.0 - np.exp(-GRID_S / time_constant_s)
    return lfilter([share], [1.0, share - 1.0], target, zi=[(1.0 - share) * target[0]])[0]


def wander(white: FloatArray, spread: float, time_constant_s: float) -> FloatArray:
    """Noise of standard deviation ``spread`` and the given memory, from unit white noise on the grid: shape (N,)."""
    memory = np.exp(-GRID_S / time_constant_s)
    return spread * np.sqrt(1.0 - memory**2) * lfilter([1.0], [1.0, -memory], white)


@dataclass(slots=True)
class RoomAir:
    """A room's temperature on a 10 s grid from before day 1 to a horizon; the horizon changes nothing before it."""

    plan: RoomPlan
    seed: int
    days: int
    ledger: Ledger
    grid_s: FloatArray = field(init=False)
    temperature_c: FloatArray = field(init=False)

    def __post_init__(self) -> None:
        plan = self.plan
        total = self.days + LEAD_DAYS
        self.grid_s = -LEAD_DAYS * DAY_S + GRID_S * np.arange(total * PER_DAY)
        period_noise = wander(self._white("period", total), 0.01, 6 * 3600.0)
        phase = 2.0 * np.pi * np.cumsum(GRID_S / (plan.cycle_s * (1.0 + period_noise)))
        hour = (self.grid_s % DAY_S) / 3600.0
        night = (hour >= NIGHT_STARTS_H) | (hour < NIGHT_ENDS_H)
        target = np.where(night, plan.setback_k, 0.0)
        for fault in self.ledger.of(AirFault, plan.name):
            target = target + fault.rise_k * fault.lasts(self.grid_s)
        busy = np.where((hour >= 8) & (hour < 19), 1.0, 0.25)
        self.temperature_c = (plan.mean_c + plan.cycle_k * np.sin(phase) + relaxed(target, plan.answer_s)
                              + busy * wander(self._white("draught", total), plan.draught_k, 120.0)
                              + wander(self._white("slow", total), plan.slow_k, 8 * 3600.0))

    def _white(self, what: str, day_count: int) -> FloatArray:
        return white_per_day(self.seed, f"{self.plan.name} {what}", -LEAD_DAYS, day_count, PER_DAY)

    def at(self, at_s: FloatArray) -> FloatArray:
        """Air temperature, °C, shape (N,)."""
        return np.interp(at_s, self.grid_s, self.temperature_c)

    def inside(self, lag_s: float) -> FloatArray:
        """Temperature of something that follows the air with a lag, °C, on the grid."""
        return relaxed(self.temperature_c, lag_s)

    def humidity_pct(self, at_s: FloatArray) -> FloatArray:
        """Relative humidity, %, shape (N,): the same water in warmer air (about -2.5 % of 42 % per K)."""
        return 42.0 - 2.5 * (self.at(at_s) - self.plan.mean_c) + 2.0 * np.sin(2 * np.pi * at_s / (3.1 * DAY_S))


def pressure_hpa(at_s: FloatArray) -> FloatArray:
    """Air pressure of the whole house, hPa, shape (N,): weather over days."""
    return 1011.0 + 7.0 * np.sin(2 * np.pi * at_s / (5.3 * DAY_S)) + 2.5 * np.sin(2 * np.pi * at_s / (1.7 * DAY_S) + 1.0)
