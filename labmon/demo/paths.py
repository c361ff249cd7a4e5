"""What a bench's fibre does to the light: PM cords and plain fibre, their temperature, walk, touches and ageing."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from analysis.fibre.pm_fibre import PmLink, phase_slope_rad_per_k
from analysis.fibre.sphere import turned
from analysis.fibre.walk import diffusion_rad2_per_s, walk_rotations
from labmon.demo.air import LEAD_DAYS, PER_DAY, RoomAir, wander
from labmon.demo.faults import JointCreep, Ledger, ModeHops, NightFails, Touch
from labmon.demo.moments import DAY_S
from labmon.demo.seeds import generator, white_per_day

FloatArray = NDArray[np.float64]
REALIGNED_AT_S = 9.5 * 3600.0
_WALK_STEP_S = 60.0
_NIGHT_FALL_H, _NIGHT_EARLIEST_H, _NIGHT_LATEST_H = 12.5, 13.5, 20.5
"""Hours after the realignment: 22:00, 23:00 and 06:00."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PmCord:
    """A PM cord: its leak cycles with temperature between two levels."""

    link: PmLink
    length_m: float
    wavelength_m: float
    phase0_rad: float
    lag_s: float
    floor_leak: float = 0.0
    rad_per_k: float | None = None
    """Where the thermal phase is not that of the length alone (an oven, a modulator chip)."""

    def leak(self, bench: str, laser: str, at_s: FloatArray, air: RoomAir, ledger: Ledger) -> FloatArray:
        """Share of the light in the unwanted port, shape (N,)."""
        slope = self.rad_per_k or -phase_slope_rad_per_k(self.length_m, self.wavelength_m)
        inside_c = np.interp(at_s, air.grid_s, air.inside(self.lag_s))
        phase = self.phase0_rad + slope * (inside_c - air.plan.mean_c)
        share = self.link.crossed_fraction(phase, self._launch_rad(bench, at_s, ledger)) + self.floor_leak
        return _disturbed(share, bench, laser, at_s, ledger)

    def _launch_rad(self, bench: str, at_s: FloatArray, ledger: Ledger) -> FloatArray | None:
        creeps = ledger.of(JointCreep, bench)
        if not creeps:
            return None
        launch = np.full(len(at_s), self.link.launch_rad)
        for creep in creeps:
            crept = np.arcsin(np.sqrt(np.maximum(creep.mean_leak(at_s) - np.sin(self.link.exit_rad) ** 2, 0.0)))
            launch = np.where(at_s >= creep.start_s, crept, launch)
        return launch


def _disturbed(share: FloatArray, bench: str, laser: str, at_s: FloatArray, ledger: Ledger) -> FloatArray:
    """A leak after touches (added) and mode hops (multiplied)."""
    for touch in ledger.of(Touch, bench):
        share = share + np.sin(0.5 * touch.angle_rad(at_s)) ** 2
    for hops in ledger.of(ModeHops, laser):
        share = share * hops.leak_factor(bench, at_s)
    return np.minimum(share, 1.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class PlainFibre:
    """Single-mode fibre: the state moves on the sphere round the wanted one.

    Its displacement is kept as a vector in the plane that touches the sphere at the wanted state (length = angle).
    """

    deg_per_k: float
    lag_s: float
    offset_deg: float = 0.0
    walk_deg_per_root_day: float = 0.0
    relaxes_days: float = 2.0
    nightly_deg_per_root_hour: float = 0.0
    is_thermal_outward: bool = False
    floor_leak: float = 0.0

    def displacement_rad(self, bench: str, laser: str, at_s: FloatArray, air: RoomAir, ledger: Ledger,
                         seed: int) -> FloatArray:
        """Displacement from the wanted state, rad, shape (N, 2)."""
        offset_way, thermal_way, touch_way = _ways(seed, bench, is_outward=self.is_thermal_outward)
        inside_c = np.interp(at_s, air.grid_s, air.inside(self.lag_s))
        moved = np.radians(self.offset_deg) * offset_way + self._walk(bench, at_s, air, ledger, seed)
        moved = moved + np.radians(self.deg_per_k) * (inside_c - air.plan.mean_c)[:, None] * thermal_way
        for touch in ledger.of(Touch, bench):
            moved = moved + touch.angle_rad(at_s)[:, None] * touch_way
        for hops in ledger.of(ModeHops, laser):
            moved = moved * np.sqrt(hops.leak_factor(bench, at_s))[:, None]
        return moved

    def leak(self, bench: str, laser: str, at_s: FloatArray, air: RoomAir, ledger: Ledger, seed: int) -> FloatArray:
        """Share of the light in the unwanted port, shape (N,): sin²(γ/2)."""
        moved = self.displacement_rad(bench, laser, at_s, air, ledger, seed)
        return np.sin(0.5 * np.hypot(moved[:, 0], moved[:, 1])) ** 2 + self.floor_leak

    def _walk(self, bench: str, at_s: FloatArray, air: RoomAir, ledger: Ledger, seed: int) -> FloatArray:
        if self.nightly_deg_per_root_hour:
            return _nightly_walk(bench, at_s, np.radians(self.nightly_deg_per_root_hour), ledger, seed)
        days = len(air.grid_s) // PER_DAY
        spread = np.radians(self.walk_deg_per_root_day) * np.sqrt(self.relaxes_days / 4.0)
        parts = [wander(white_per_day(seed, f"{bench} walk {part}", -LEAD_DAYS, days, PER_DAY), spread,
                        self.relaxes_days * DAY_S) for part in "xy"]
        return np.stack([np.interp(at_s, air.grid_s, part) for part in parts], axis=-1)


def _ways(seed: int, bench: str, *, is_outward: bool) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Unit directions of a bench's static offset, thermal motion and touches in the plane, each shape (2,)."""
    turn = generator(seed, bench, "ways").uniform(0.0, 2.0 * np.pi)
    offset_way, across = np.array([np.cos(turn), np.sin(turn)]), np.array([-np.sin(turn), np.cos(turn)])
    return (offset_way, offset_way, offset_way) if is_outward else (offset_way, across, offset_way)


def _nightly_walk(bench: str, at_s: FloatArray, rad_per_root_hour: float, ledger: Ledger, seed: int) -> FloatArray:
    """A walk that starts anew at each day's realignment, rad, shape (N, 2)."""
    day = np.floor((at_s - REALIGNED_AT_S) / DAY_S).astype(int)
    walk = np.empty((len(at_s), 2))
    for number in np.unique(day):
        inside = day == number
        since = at_s[inside] - REALIGNED_AT_S - number * DAY_S
        path = _day_path(bench, int(number), rad_per_root_hour, seed,
                         fails=any(row.lasts(np.array([number * DAY_S + REALIGNED_AT_S]))[0]
                                   for row in ledger.of(NightFails, bench)))
        steps = _WALK_STEP_S * np.arange(len(path))
        walk[inside] = np.stack([np.interp(since, steps, path[:, part]) for part in (0, 1)], axis=-1)
    return walk


@lru_cache(maxsize=64)
def _day_path(bench: str, day: int, rad_per_root_hour: float, seed: int, *, fails: bool) -> FloatArray:
    """A day's walk in steps of a minute, shape (1441, 2): drawn again until it ends as the ledger says."""
    step_count = int(DAY_S / _WALK_STEP_S)
    diffusion = diffusion_rad2_per_s(rad_per_root_hour, 3600.0)
    pole = np.array([0.0, 0.0, 1.0])
    hours = np.arange(step_count + 1) * _WALK_STEP_S / 3600.0
    for attempt in range(20_000):
        rng = generator(seed, bench, "day", day, attempt)
        state = np.vstack([pole, turned(walk_rotations(step_count, _WALK_STEP_S, diffusion, rng), pole)])
        angle = np.arctan2(np.hypot(state[:, 0], state[:, 1]), state[:, 2])
        way = state[:, :2] / np.maximum(np.hypot(state[:, 0], state[:, 1]), 1e-15)[:, None]
        path = angle[:, None] * way
        if fails:
            start = path[np.searchsorted(hours, _NIGHT_FALL_H)]
            pull = start / max(float(np.hypot(*start)), 1e-15) * np.radians(1.6)
            path = path + np.clip(hours - _NIGHT_FALL_H, 0.0, 8.0)[:, None] * pull
        if _ends_as_wanted(np.degrees(np.hypot(path[:, 0], path[:, 1])), hours, fails=fails):
            return path
    raise RuntimeError(f"{bench}: no walk of day {day} ends as the ledger says; loosen the demo's conditions")


def _ends_as_wanted(angle_deg: FloatArray, hours: FloatArray, *, fails: bool) -> bool:
    """Quiet days stay inside the warning; failing ones cross both levels in the night, slowly, and stay beyond."""
    if not fails:
        return bool(angle_deg.max() < 8.2)
    if angle_deg[hours < _NIGHT_FALL_H].max() > 8.2 or angle_deg.max() < 17.0 or angle_deg.max() > 40.0:
        return False
    warned = hours[np.argmax(angle_deg > 10.5)]
    crossed = hours[np.argmax(angle_deg > 17.0)]
    is_timely = _NIGHT_EARLIEST_H <= warned and warned + 0.75 <= crossed <= _NIGHT_LATEST_H
    return bool(is_timely and angle_deg[hours > crossed].min() > 15.6)


def sop_of_displacement(moved_rad: FloatArray, wanted: FloatArray) -> FloatArray:
    """States at a displacement from the wanted one.

    Args:
        moved_rad: Displacement, rad, shape (N, 2).
        wanted: Unit vector, shape (3,).
    Returns:
        Unit Stokes vectors, shape (N, 3): the great-circle angle to ``wanted`` is the displacement's length.
    """
    east = np.cross([0.0, 0.0, 1.0], wanted)
    east /= np.linalg.norm(east)
    north = np.cross(wanted, east)
    angle = np.hypot(moved_rad[:, 0], moved_rad[:, 1])[:, None]
    way = moved_rad[:, :1] * east + moved_rad[:, 1:] * north
    return np.cos(angle) * wanted + np.sinc(angle / np.pi) * way


