"""Cosine of temperature fitted at many periods at once, on readings summed over narrow cells of temperature."""

from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.quantities import FloatArray

CHI2_95: Final = 3.841458820694124  # 95 % point of chi-square with one degree of freedom
HALF_ARCS_RAD: Final = np.concatenate([np.arange(0.1, 3.0, 0.1), np.arange(3.0, 20.1, 0.4)])
_CELLS_PER_UNIT = 80
_ROUNDS = 4


@dataclass(frozen=True, slots=True)
class ArcFits:
    """Best a, b, c of x = a + b cos(θ u) + c sin(θ u) at each half arc θ; all fields have shape (K,).

    ``squares``: (weighted) sum of squares left, all readings. ``crest_variance``: of a + hypot(b, c), for a unit variance.
    """

    arc_rad: FloatArray
    a: FloatArray
    b: FloatArray
    c: FloatArray
    squares: FloatArray
    crest_variance: FloatArray

    @property
    def swing(self) -> FloatArray:
        """h = hypot(b, c)."""
        return np.hypot(self.b, self.c)

    def curve(self, best: int, place: FloatArray) -> FloatArray:
        """The fitted x of one half arc at places u, shape of ``place``."""
        phase = self.arc_rad[best] * place - np.arctan2(self.c[best], self.b[best])
        return self.a[best] + self.swing[best] * np.cos(phase)


@dataclass(frozen=True, slots=True)
class ArcCells:
    """Readings by cell, shape (M,): mean place u, mean level x, count, squares about the mean, noise variance of x; that of u."""

    place: FloatArray
    level: FloatArray
    count: FloatArray
    within: FloatArray
    level_variance: FloatArray
    place_variance: float

    @classmethod
    def of(cls, place: FloatArray, level: FloatArray, level_variance: tuple[float, float], place_variance: float) -> "ArcCells":
        """Sum readings over cells of 1/80 of half the temperature range; far outliers get cells of their own.

        ``level_variance``: v₀, v₂ of a noise of x with variance v₀ + v₂ x².
        """
        cell = np.floor((place - place.min()) * _CELLS_PER_UNIT).astype(np.intp)
        if cell.max() > 20 * _CELLS_PER_UNIT:
            cell = np.unique(cell, return_inverse=True)[1]
        count = np.bincount(cell)
        used = count > 0
        number = count[used].astype(np.float64)
        mean = np.bincount(cell, level)[used] / number
        centred = level - level.mean()
        squares = np.bincount(cell, centred**2)[used]
        within = np.maximum(squares - number * (mean - level.mean()) ** 2, 0.0)
        noise = level_variance[0] + level_variance[1] * mean**2
        return cls(np.bincount(cell, place)[used] / number, mean, number, within, noise, place_variance)

    @property
    def readings(self) -> float:
        """Readings in all cells."""
        return float(self.count.sum())

    @property
    def squares_about_mean(self) -> float:
        """Total sum of squares of the readings about their mean."""
        return float(self.count @ (self.level - self.count @ self.level / self.readings) ** 2 + self.within.sum())

    def fit(self, arc_rad: FloatArray) -> ArcFits:
        """Least squares at every half arc at once, the temperature taken as free of noise."""
        phase = np.outer(arc_rad, self.place)
        # 1 - cos instead of cos: well conditioned for small arcs
        columns = np.stack([np.ones_like(phase), 2.0 * np.sin(0.5 * phase) ** 2, np.sin(phase)], axis=1)
        weighted = columns * self.count
        normal = weighted @ columns.transpose(0, 2, 1)
        centre = self.count @ self.level / self.readings
        solution = np.linalg.solve(normal, (weighted @ (self.level - centre))[..., None])[..., 0]
        left = self.level - centre - np.einsum("kt,ktm->km", solution, columns)
        b, c = -solution[:, 1], solution[:, 2]
        squares = left**2 @ self.count + self.within.sum()
        return ArcFits(arc_rad, solution[:, 0] - b + centre, b, c, squares, _crest_variance(normal, b, c))

    def refit(self, fits: ArcFits) -> ArcFits:
        """The same with effective variances σx² + f'² σu², by Gauss–Newton from the plain fit. Source: F-75."""
        if not (self.place_variance > 0.0 and self.level_variance.min() > 0.0):
            return fits
        phase = np.outer(fits.arc_rad, self.place)
        fall, sine = 2.0 * np.sin(0.5 * phase) ** 2, np.sin(phase)
        arc = fits.arc_rad[:, None]
        terms = np.stack([fits.a + fits.b, -fits.b, fits.c], axis=1)  # crest line A, -b, c
        best, least, kept = terms, np.full(len(arc), np.inf), np.full(len(arc), np.nan)
        for _ in range(_ROUNDS + 1):
            slope = arc * (terms[:, 1:2] * sine + terms[:, 2:] * (1.0 - fall))
            variance = self.level_variance + slope**2 * self.place_variance
            left = self.level - terms[:, :1] - terms[:, 1:2] * fall - terms[:, 2:] * sine
            own = left**2 * self.count + self.within
            squares = np.sum(own / variance, axis=1)
            better = squares < least
            best, least = np.where(better[:, None], terms, best), np.where(better, squares, least)
            rise = arc[..., None] * np.stack([np.zeros_like(fall), sine, 1.0 - fall], axis=1)
            steer = slope[:, None] * rise * (self.place_variance / variance[:, None])  # half of d ln v / d term
            shape = np.stack([np.ones_like(fall), fall, sine], axis=1)
            lean = shape + left[:, None] * steer
            weight, inside = (self.count / variance)[:, None], (self.within / variance)[:, None]
            normal = (lean * weight) @ lean.transpose(0, 2, 1) + (steer * inside) @ steer.transpose(0, 2, 1)
            pull = np.sum(lean * weight * left[:, None] + steer * inside, axis=2)
            kept = np.where(better[:, None, None], normal, kept if kept.ndim == 3 else normal)
            terms = terms + np.linalg.solve(normal, pull[..., None])[..., 0]
        b, c = -best[:, 1], best[:, 2]
        return ArcFits(fits.arc_rad, best[:, 0] - b, b, c, least, _crest_variance(kept, b, c))


def _crest_variance(normal: FloatArray, b: FloatArray, c: FloatArray) -> FloatArray:
    """Variance of a + h in the terms (a + b, -b, c), whose derivatives are 1, 1 - b/h, c/h."""
    swing = np.maximum(np.hypot(b, c), np.finfo(float).tiny)
    slope = np.stack([np.ones_like(b), 1.0 - b / swing, c / swing], axis=1)
    return np.einsum("ki,ki->k", slope, np.linalg.solve(normal, slope[..., None])[..., 0])


def crest_band(fits: list[ArcFits], least: float, unit: float) -> tuple[float, float, float, float]:
    """Least and largest crest, and least and largest half arc, whose profile lies within the 95 % point.

    The crest is open (-inf, inf) where the shortest half arc tried, 0.1 rad, still fits. ``unit`` is the variance of one reading,
    raised by autocorrelation. Source: docs/formulas.md, F-75.
    """
    low, high, shortest, longest = np.inf, -np.inf, np.inf, -np.inf
    for fit in fits:
        room = CHI2_95 - (fit.squares - least) / unit
        allowed = np.flatnonzero(room >= 0.0)
        if not len(allowed):
            continue
        if fit.arc_rad[allowed[0]] <= HALF_ARCS_RAD[0]:
            low, high = -np.inf, np.inf
        reach = np.sqrt(room[allowed] * unit * fit.crest_variance[allowed])
        crest = (fit.a + fit.swing)[allowed]
        low, high = min(low, float(np.min(crest - reach))), max(high, float(np.max(crest + reach)))
        shortest = min(shortest, float(fit.arc_rad[allowed[0]]))
        longest = max(longest, float(fit.arc_rad[allowed[-1]]))
    return low, high, shortest, longest
