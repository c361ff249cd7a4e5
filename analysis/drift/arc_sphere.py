"""Thermal arc seen as Stokes vectors: a circle on the sphere round the fibre's axis."""

import math
from dataclasses import dataclass

import numpy as np

from analysis.drift.arc import ArcVerdict, WorstEr, farthest_rad, verdict_of, worst_er_of_circle_db
from analysis.drift.effective import block_inflation
from analysis.quantities import FloatArray, IntArray, angle_between_rad, er_db_from_angle_rad

_FEWEST = 8
_ROUNDS = 20
_PHASE_CELLS = 720
_Z_95 = 1.959963984540054


@dataclass(frozen=True, slots=True)
class SphereArc:
    """Circle fitted to states of polarization; angles on the sphere, rad.

    Attributes:
        axis: Unit Stokes vector of the nearer pole of the circle, shape (3,). ``radius_rad``: its angular radius, in (0, π/2].
        plane_radius_rad: Radius of the plain plane fit, before the refinement.
        tilt_rad: Angle from the wanted state to the axis. ``half_arc_rad``: half the phase range seen, at most π.
        worst: Lowest ER on the whole circle with its 95 % band. ``best_er_db``: highest one. ``seen_er_db``: lowest mean of
        the states seen in one narrow cell of phase. ``fibre_er_db``: ER on the fibre's own axis, -20 log₁₀ tan(ρ/2).
        spread_rad: Standard deviation across the circle. ``inflation``: factor on variances by autocorrelation.
        readings: Readings used.
    """

    verdict: ArcVerdict
    axis: FloatArray
    radius_rad: float
    plane_radius_rad: float
    tilt_rad: float
    half_arc_rad: float
    worst: WorstEr
    best_er_db: float
    seen_er_db: float
    fibre_er_db: float
    spread_rad: float
    inflation: float
    readings: int


def fit_sphere_arc(at_us: IntArray, sop: FloatArray, wanted: FloatArray) -> SphereArc:
    """Fit the circle on which a fibre's output moves.

    Args:
        at_us: Times, µs, shape (N,), sorted, any spacing; gaps need nothing.
        sop: Stokes vectors (S1, S2, S3), shape (N, 3); lengths do not matter, NaN rows are left out.
        wanted: Wanted state, shape (3,).
    Returns:
        The arc. The plane through the points (not forced through the centre) starts a least-squares fit of the angle to the
        axis. ``NO_ARC`` with NaN below 8 readings or where the radius is under 3 times the spread across the circle. The band
        goes along the circle's curvature cot ρ, in which the error is nearly normal, and is widened by autocorrelation.
    Raises:
        ValueError: The shapes differ.
    Source: docs/formulas.md, F-76, F-77.
    """
    sop = np.asarray(sop, np.float64)
    if sop.shape != (len(at_us), 3) or np.shape(wanted) != (3,):
        raise ValueError(f"sop has shape {sop.shape} for {len(at_us)} times, wanted {np.shape(wanted)}; pass (N, 3) and (3,).")
    length = np.sqrt(np.einsum("ij,ij->i", sop, sop))
    known = (length > 0.0) & np.isfinite(length)
    if not known.all():
        at_us, sop, length = at_us[known], sop[known], length[known]
    if len(sop) < _FEWEST:
        return _no_arc(len(sop))
    sop = sop / length[:, None]
    wanted = np.asarray(wanted, np.float64) / np.linalg.norm(wanted)
    plane, plane_radius = plane_circle(sop)
    cells = _Cells.of(sop, plane)
    axis, radius = refined_circle(cells.sop, cells.count, plane, plane_radius)
    away = np.arccos(np.clip(sop @ axis, -1.0, 1.0)) - radius
    spread = float(np.sqrt(away @ away / (len(sop) - 3)))
    if radius < 3.0 * spread:
        return _no_arc(len(sop))
    inflation = block_inflation(at_us, away)
    tilt = float(angle_between_rad(axis, wanted))
    worst = _worst(cells, axis, radius, wanted, spread * math.sqrt(inflation))
    half_arc = _half_arc(cells.sop, cells.count, axis)
    seen = float(np.min(er_db_from_angle_rad(angle_between_rad(cells.sop, wanted))))
    return SphereArc(
        verdict_of(half_arc, worst), axis, radius, plane_radius, tilt, half_arc, worst,
        float(er_db_from_angle_rad(abs(tilt - radius))), seen, float(er_db_from_angle_rad(radius)), spread, inflation, len(sop),
    )


def plane_circle(sop: FloatArray, weight: FloatArray | None = None) -> tuple[FloatArray, float]:
    """Axis and angular radius, rad in [0, π/2], of the plane through unit vectors, shape (N, 3).

    The axis is the smallest eigenvector of the centred scatter. Source: docs/formulas.md, F-76.
    """
    mean = np.average(sop, axis=0, weights=weight)
    centred = sop - mean
    scatter = centred.T @ (centred if weight is None else centred * weight[:, None])
    axis = np.linalg.eigh(scatter)[1][:, 0]
    height = float(axis @ mean)
    axis = axis if height >= 0.0 else -axis
    return axis, math.acos(min(abs(height), 1.0))


def refined_circle(sop: FloatArray, weight: FloatArray, axis: FloatArray, radius_rad: float) -> tuple[FloatArray, float]:
    """Axis and radius (0 to π/2) that minimise Σ w (angle to axis - radius)², by Gauss–Newton from a first guess."""
    for _ in range(_ROUNDS):
        left, slope = _residual(sop, axis, radius_rad)
        weighted = slope * weight[:, None]
        step = -np.linalg.lstsq(weighted.T @ slope, weighted.T @ left, rcond=None)[0]
        step *= min(1.0, 0.3 / max(float(np.linalg.norm(step)), 1e-300))
        axis = _moved(axis, step[:2])
        radius_rad += float(step[2])
        if float(np.max(np.abs(step))) < 1e-13:
            break
    radius_rad = float(np.arccos(np.cos(radius_rad)))
    return (axis, radius_rad) if radius_rad <= math.pi / 2 else (-axis, math.pi - radius_rad)


def _residual(sop: FloatArray, axis: FloatArray, radius_rad: float) -> tuple[FloatArray, FloatArray]:
    """Angle to the axis less the radius, shape (N,), and its slopes by two turns of the axis and by the radius, (N, 3)."""
    one, other = _tangents(axis)
    x, y, z = sop @ one, sop @ other, sop @ axis
    ring = np.hypot(x, y)
    safe = np.maximum(ring, 1e-12)
    return np.arctan2(ring, z) - radius_rad, np.stack([-x / safe, -y / safe, -np.ones_like(x)], axis=1)


def _tangents(axis: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Two unit vectors square to the axis and to each other."""
    one = np.cross(axis, np.eye(3)[int(np.argmin(np.abs(axis)))])
    one /= np.linalg.norm(one)
    return one, np.cross(axis, one)


def _moved(axis: FloatArray, step: FloatArray) -> FloatArray:
    one, other = _tangents(axis)
    moved = axis + step[0] * one + step[1] * other
    return moved / np.linalg.norm(moved)


@dataclass(frozen=True, slots=True)
class _Cells:
    """Mean state and count of the readings in each cell of 0.5° of phase about the first axis; few readings stay themselves."""

    sop: FloatArray
    count: FloatArray

    @classmethod
    def of(cls, sop: FloatArray, axis: FloatArray) -> "_Cells":
        if len(sop) <= 2 * _PHASE_CELLS:
            return cls(sop, np.ones(len(sop)))
        one, other = _tangents(axis)
        phase = np.arctan2(sop @ other, sop @ one)
        order = np.floor((phase + math.pi) * (_PHASE_CELLS / math.tau)).astype(np.intp)
        count = np.bincount(order, minlength=_PHASE_CELLS + 1)
        used = count > 0
        total = np.stack([np.bincount(order, sop[:, k], _PHASE_CELLS + 1)[used] for k in range(3)], axis=1)
        return cls(total / np.linalg.norm(total, axis=1)[:, None], count[used].astype(np.float64))


def _worst(cells: _Cells, axis: FloatArray, radius: float, wanted: FloatArray, noise_rad: float) -> WorstEr:
    """Worst ER and its band: refit the axis at both ends of the curvature's band, and add the axis's own error."""
    _, slope = _residual(cells.sop, axis, radius)
    inverse = np.linalg.pinv(slope.T @ (slope * cells.count[:, None])) * noise_rad**2
    curvature = 1.0 / math.tan(radius)
    error = math.sqrt(inverse[2, 2]) / math.sin(radius) ** 2
    middle = worst_er_of_circle_db(radius, float(angle_between_rad(axis, wanted)))
    given = np.linalg.pinv(slope[:, :2].T @ (slope[:, :2] * cells.count[:, None])) * noise_rad**2
    sideways = math.sqrt(max(np.linalg.eigvalsh(given)[-1], 0.0))
    ends = []
    for sign in (-_Z_95, _Z_95):
        bent = math.atan2(1.0, curvature + sign * error)
        turned = _axis_at(cells, axis, bent)
        ends.append(farthest_rad(bent, float(angle_between_rad(turned, wanted))))
    here = farthest_rad(radius, float(angle_between_rad(axis, wanted)))
    far, near = (math.hypot(end - here, _Z_95 * sideways) for end in ends)
    high, low = (float(er_db_from_angle_rad(min(max(angle, 0.0), math.pi))) for angle in (here - near, here + far))
    return WorstEr(middle, min(low, middle), max(high, middle))


def _axis_at(cells: _Cells, axis: FloatArray, radius_rad: float) -> FloatArray:
    """Best axis for a given radius."""
    for _ in range(_ROUNDS):
        left, slope = _residual(cells.sop, axis, radius_rad)
        weighted = slope[:, :2] * cells.count[:, None]
        step = -np.linalg.lstsq(weighted.T @ slope[:, :2], weighted.T @ left, rcond=None)[0]
        step *= min(1.0, 0.3 / max(float(np.linalg.norm(step)), 1e-300))
        axis = _moved(axis, step)
        if float(np.max(np.abs(step))) < 1e-10:
            break
    return axis


def _half_arc(sop: FloatArray, count: FloatArray, axis: FloatArray) -> float:
    """Half the phase range from the 1 % to the 99 % point, counted from the middle of the widest hole, rad."""
    one, other = _tangents(axis)
    phase = np.arctan2(sop @ other, sop @ one)
    order = np.argsort(phase)
    phase, count = phase[order], count[order]
    hole = np.diff(phase, append=phase[0] + math.tau)
    start = int(np.argmax(hole))
    phase = np.concatenate([phase[start + 1:], phase[:start + 1] + math.tau])
    count = np.concatenate([count[start + 1:], count[:start + 1]])
    share = np.cumsum(count) / count.sum()
    reach = phase[np.searchsorted(share, 0.99)] - phase[np.searchsorted(share, 0.01)]
    return float(0.5 * min(reach, math.tau))


def _no_arc(readings: int) -> SphereArc:
    nan = float("nan")
    worst = WorstEr(nan, nan, nan)
    return SphereArc(ArcVerdict.NO_ARC, np.full(3, nan), nan, nan, nan, nan, worst, nan, nan, nan, nan, nan, readings)
