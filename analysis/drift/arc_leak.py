"""Thermal arc seen by two ports: the leak swings with temperature, and its crest is the worst that the fibre does."""

import math
from dataclasses import dataclass

import numpy as np
from scipy import stats

from analysis.drift.arc import LEAST_HALF_ARC_RAD, ArcVerdict, WorstEr, er_db_of_fraction, verdict_of
from analysis.drift.arc_cells import HALF_ARCS_RAD, ArcCells, ArcFits, crest_band
from analysis.drift.effective import block_inflation
from analysis.quantities import FloatArray, IntArray

_FEWEST = 30
_NOISE_SCALE = 0.03  # of half the temperature range: variances double at this noise, so that bands hold (simulated)
_MOST_NOISE = 0.05  # of half the temperature range; beyond it effective variances no longer mend the bias (simulated)


@dataclass(frozen=True, slots=True)
class LeakArc:
    """Fit of x = a + h cos(κ T + φ), x the share of all light in the unwanted port.

    Attributes:
        worst: Lowest ER as the phase turns, from a + h. ``best_er_db``: from a - h; inf where the fit reaches no light.
        seen_er_db: Lowest ER of the fitted curve between the 1 % and 99 % points of temperature.
        kappa_rad_per_k, kappa_low_rad_per_k, kappa_high_rad_per_k: |κ| and its 95 % band.
        half_arc_rad: Half the phase range between those points. ``mean_fraction``, ``swing_fraction``: a and h.
        r_squared: Share of the variance explained. ``inflation``: Factor by which autocorrelation raised the variances.
        temperature_noise_k: Noise of the temperature that was found and allowed for, K. ``readings``: Readings used.
    """

    verdict: ArcVerdict
    worst: WorstEr
    best_er_db: float
    seen_er_db: float
    kappa_rad_per_k: float
    kappa_low_rad_per_k: float
    kappa_high_rad_per_k: float
    half_arc_rad: float
    mean_fraction: float
    swing_fraction: float
    r_squared: float
    inflation: float
    temperature_noise_k: float
    readings: int


def fit_leak_arc(at_us: IntArray, leak: FloatArray, temperature_k: FloatArray) -> LeakArc:
    """Fit the thermal arc of a two-port tap.

    Args:
        at_us: Times, µs, shape (N,), sorted, any spacing; gaps need nothing.
        leak: Unwanted over wanted port, linear, shape (N,); noise may carry it below 0. At floor give the net as read.
        temperature_k: Temperature of the fibre, K or °C, shape (N,); shift it first where the fibre lags.
    Returns:
        The arc; NaN readings are left out. Below 30 readings, at a constant temperature or leak, or where a swing is not shown
        (1 % level, all κ tried), the verdict is ``NO_ARC`` and the figures are NaN. κ is sought for half arcs of 0.1 to 20 rad.
        Too short, too, where the band of κ reaches below ±0.45 rad or the temperature's noise passes 1/20 of half its range.
        Noise of the temperature (from fourth differences in time) is allowed for by effective variances. The band is a
        profile likelihood over κ, widened by autocorrelation and by that noise; its ends are -inf and inf where the data do
        not close it.
    Raises:
        ValueError: The shapes differ.
    Source: docs/formulas.md, F-75, F-77.
    """
    if not np.shape(at_us) == np.shape(leak) == np.shape(temperature_k):
        raise ValueError(f"at_us, leak and temperature_k have shapes {np.shape(at_us)}, {np.shape(leak)}, "
                         f"{np.shape(temperature_k)}; pass one of each per reading.")
    with np.errstate(divide="ignore", invalid="ignore"):
        fraction = np.asarray(leak, np.float64) / (1.0 + np.asarray(leak, np.float64))
    known = np.isfinite(fraction) & np.isfinite(temperature_k)
    if not known.all():
        at_us, fraction, temperature_k = at_us[known], fraction[known], temperature_k[known]
    if len(fraction) < _FEWEST:
        return _no_arc(len(fraction))
    edge = len(fraction) // 100
    ordered = np.partition(temperature_k, (edge, -1 - edge))
    low_k, high_k = ordered[edge], ordered[-1 - edge]
    if not (high_k > low_k and np.ptp(fraction) > 0.0):
        return _no_arc(len(fraction))
    half_k = 0.5 * (high_k - low_k)
    place = (temperature_k - 0.5 * (high_k + low_k)) / half_k
    place_noise = math.sqrt(noise_of(at_us, place)[0])
    cells = ArcCells.of(place, fraction, noise_of(at_us, fraction), place_noise**2)
    scan = cells.fit(HALF_ARCS_RAD)
    inflation = block_inflation(at_us, fraction - scan.curve(int(np.argmin(scan.squares)), place))
    if _chance(cells, float(scan.squares.min()), inflation) > 0.01:
        return _no_arc(len(fraction))
    return _measured(cells, scan, inflation, half_k, place_noise * half_k)


def _measured(cells: ArcCells, scan: ArcFits, inflation: float, half_k: float, noise_k: float) -> LeakArc:
    start = scan.arc_rad[int(np.argmin(scan.squares))]
    coarse = cells.refit(cells.fit(HALF_ARCS_RAD[(HALF_ARCS_RAD < 1.6 * start + 0.3) & (HALF_ARCS_RAD > 0.4 * start - 0.3)]))
    middle = int(np.argmin(coarse.squares))
    ends = coarse.arc_rad[[max(middle - 1, 0), min(middle + 1, len(coarse.arc_rad) - 1)]]
    tried = [coarse, cells.refit(cells.fit(np.linspace(*ends, 25)))]
    unit = float(tried[-1].squares.min()) / max(cells.readings - 4.0, 1.0) * inflation
    unit *= 1.0 + (noise_k / half_k / _NOISE_SCALE) ** 2
    for _ in range(2):  # a grid as wide as the error, where the last one was too coarse for it
        vertex, width = _vertex(tried[-1], unit)
        if width < 4.0 * float(tried[-1].arc_rad[1] - tried[-1].arc_rad[0]):
            tried.append(cells.refit(cells.fit(vertex + width * np.linspace(-3.0, 3.0, 21))))
    near = min(tried, key=lambda fits: float(fits.squares.min()))
    best = int(np.argmin(near.squares))
    low, high, least, most = crest_band(tried, float(near.squares[best]), unit)
    mean, swing, arc = near.a[best], near.swing[best], float(near.arc_rad[best])
    worst = WorstEr(er_db_of_fraction(mean + swing), er_db_of_fraction(high), er_db_of_fraction(low))
    seen = float(np.max(near.curve(best, cells.place[np.abs(cells.place) <= 1.0])))
    is_blurred = noise_k > _MOST_NOISE * half_k or least < 0.75 * LEAST_HALF_ARC_RAD
    verdict = ArcVerdict.TOO_SHORT if is_blurred else verdict_of(arc, worst)
    return LeakArc(
        verdict, worst, er_db_of_fraction(mean - swing), er_db_of_fraction(seen),
        arc / half_k, least / half_k, most / half_k, arc, float(mean), float(swing),
        1.0 - float(scan.squares.min()) / cells.squares_about_mean, inflation, noise_k, int(cells.readings),
    )


def _vertex(fits: ArcFits, unit: float) -> tuple[float, float]:
    """Half arc of least squares and its standard error, from a parabola through five points, rad; inf where it does not bend."""
    best = min(max(int(np.argmin(fits.squares)), 2), len(fits.arc_rad) - 3)
    part = slice(best - 2, best + 3)
    curve, slope, _ = np.polyfit(fits.arc_rad[part] - fits.arc_rad[best], (fits.squares[part] - fits.squares[best]) / unit, 2)
    return (float(fits.arc_rad[best] - 0.5 * slope / curve), float(1.0 / np.sqrt(curve))) if curve > 0.0 else (np.nan, np.inf)


def _chance(cells: ArcCells, left: float, inflation: float) -> float:
    """Chance that noise alone explains so much at any κ tried; about two independent κ per radian of half arc."""
    gain = cells.squares_about_mean - left
    unit = left / max(cells.readings - 4.0, 1.0) * inflation
    return float(2.0 * HALF_ARCS_RAD[-1] * stats.chi2.sf(gain / unit, 3)) if unit > 0.0 else 0.0


def noise_of(at_us: IntArray, level: FloatArray) -> tuple[float, float]:
    """Variance v₀ + v₂ y² of the noise on a smooth course y, from fourth differences of evenly spaced neighbours.

    Least squares of Δ⁴²/70 on (1, y²), neither below 0; zeros where no five readings lie evenly (within half the usual
    spacing, the median of at most 5000). A course not smooth over five readings counts as noise. Source: F-75.
    """
    if len(at_us) < 5:
        return 0.0, 0.0
    spacing = np.diff(at_us)
    usual = np.median(spacing[::len(spacing) // 5000 + 1])
    even = np.abs(spacing - usual) <= 0.5 * usual
    even = even[:-3] & even[1:-2] & even[2:-1] & even[3:]
    if not even.any():
        return 0.0, 0.0
    square = np.diff(level, 4)[even] ** 2 / 70.0
    course = level[2:-2][even] ** 2
    mean, apart = square.mean(), course - course.mean()
    rise = float(apart @ square / max(float(apart @ apart), np.finfo(float).tiny))
    floor = float(mean - rise * course.mean())
    if rise < 0.0:
        return float(mean), 0.0
    return (floor, rise) if floor > 0.0 else (1e-6 * float(mean), float(mean / course.mean()))


def _no_arc(readings: int) -> LeakArc:
    nan = float("nan")
    return LeakArc(ArcVerdict.NO_ARC, WorstEr(nan, nan, nan), nan, nan, nan, nan, nan, nan, nan, nan, nan, nan, nan, readings)
