"""One two-port measurement with every uncertainty it rests on: ER to first order, and by Monte Carlo.

The pipeline's reducers (`analysis.reduce.ports`) carry noise, floors and leakage; here zeros and gain have their own
uncertainty too, for the notebook and for the claim in a paper.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from analysis.quantities import DB_PER_NEPER_OF_POWER, BoolArray, FloatArray, db_from_ratio
from analysis.reduce.extinction import CONFIDENCE, Extinction, extinction
from analysis.reduce.leakage import PortNets, without_leakage

FEWEST_DRAWS: Final = 100
MISSED_SHARE: Final = 0.05


@dataclass(frozen=True, slots=True, kw_only=True)
class TwoPortMeasurement:
    """Readings of both ports and the calibration they are read with; ``…_sigma`` is 1 sigma, independent of the others.

    Single values or arrays of one shape (N,); readings and zeros in one linear unit (never dBm).

    Attributes:
        gain_ratio: Gain of port 1 / gain of port 2.
        leakage, leakage_sigma: [[a, b], [c, d]], shape (2, 2); None is no leakage, or exact entries.
        wanted_port: 1 or 2.
    """

    reading1: Any
    reading2: Any
    reading1_sigma: Any = 0.0
    reading2_sigma: Any = 0.0
    zero1: Any = 0.0
    zero2: Any = 0.0
    zero1_sigma: Any = 0.0
    zero2_sigma: Any = 0.0
    gain_ratio: Any = 1.0
    gain_ratio_sigma: Any = 0.0
    leakage: Any = None
    leakage_sigma: Any = None
    wanted_port: int = 1

    def __post_init__(self) -> None:
        if self.wanted_port not in (1, 2):
            raise ValueError(f"wanted_port={self.wanted_port!r} is not a port; give 1 or 2.")
        for name in ("reading1_sigma", "reading2_sigma", "zero1_sigma", "zero2_sigma", "gain_ratio_sigma", "leakage_sigma"):
            value = getattr(self, name)
            if value is not None and (np.asarray(value) < 0.0).any():
                raise ValueError(f"{name} is below 0; give the standard uncertainty, 0 where it is exact.")


@dataclass(frozen=True, slots=True)
class ErDraws:
    """ER by Monte Carlo, shapes of the readings.

    Attributes:
        er_db: Median, dB; the bound ``low_db`` where ``is_lower_bound``.
        er_sigma_db: Standard deviation of the physical draws, dB; NaN for a bound.
        low_db, high_db: Central interval at the level, dB; for a bound ``low_db`` is one-sided and ``high_db`` NaN (open).
        is_lower_bound: The other port is not told from dark: 5 % or more of its draws are at or below 0.
        physical_share: Share of draws in which both powers are above 0. Below 100 such draws, and where the wanted port
            itself is not told from dark, every ER is NaN.
    """

    er_db: FloatArray
    er_sigma_db: FloatArray
    low_db: FloatArray
    high_db: FloatArray
    is_lower_bound: BoolArray
    physical_share: FloatArray


def er_to_first_order(measurement: TwoPortMeasurement, *, confidence: float = CONFIDENCE) -> Extinction:
    """ER with its first-order uncertainty, or a bound.

    Returns:
        As `extinction`, shapes (N,) (N = 1 for single values): ``er_db`` and ``er_sigma_db`` in dB, NaN where undefined.
    Source: docs/formulas.md, F-05 to F-09, F-22; good while the weak port's relative uncertainty is below 0.2.
    """
    m = measurement
    first = np.asarray(m.reading1, dtype=np.float64) - m.zero1
    dark = np.asarray(m.reading2, dtype=np.float64) - m.zero2
    second_sigma = np.hypot(
        np.asarray(m.gain_ratio) * np.hypot(m.reading2_sigma, m.zero2_sigma), np.asarray(m.gain_ratio_sigma) * dark
    )
    nets = PortNets(first, dark * m.gain_ratio, np.hypot(m.reading1_sigma, m.zero1_sigma), second_sigma, 0.0)
    nets = without_leakage(nets, m.leakage, m.leakage_sigma)
    parts = np.broadcast_arrays(nets.first, nets.second, nets.first_sigma, nets.second_sigma, nets.covariance)
    wanted, other, wanted_sigma, other_sigma, covariance = (np.atleast_1d(part).astype(np.float64) for part in parts)
    if m.wanted_port == 2:
        wanted, other, wanted_sigma, other_sigma = other, wanted, other_sigma, wanted_sigma
    return extinction(wanted, other, wanted_sigma, other_sigma, covariance, confidence=confidence)


def er_by_draws(
    measurement: TwoPortMeasurement, random: np.random.Generator, *, draws: int = 20_000, confidence: float = CONFIDENCE
) -> ErDraws:
    """ER with its uncertainty by Monte Carlo: no linearization, so it holds near the ceiling where the first order fails.

    Every uncertain input is drawn from a normal distribution; draws with a power at or below 0 are unphysical and left
    out, which is the flat prior on P >= 0 of F-06. Zeros, gain and leakage are drawn anew in each draw, common to it.

    Args:
        measurement: N samples need draws x N numbers several times over: keep N small.
        random: The seeded generator; same seed, same result.
        draws: At least 100.
        confidence: Level of the interval, in (0, 1).
    Returns:
        See `ErDraws`. Source: JCGM 101:2008 (propagation of distributions); docs/formulas.md, F-23.
    Raises:
        ValueError: ``draws`` or ``confidence`` out of range.
    """
    if draws < FEWEST_DRAWS:
        raise ValueError(f"draws={draws} is too few for a quantile; use 20000.")
    if not 0.0 < confidence < 1.0:
        raise ValueError(f"confidence={confidence!r} is not between 0 and 1; 0.95 is usual.")
    wanted, other = _drawn_powers(measurement, random, draws)
    is_physical = (wanted > 0.0) & (other > 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        er_db = np.where(is_physical, 10.0 * np.log10(wanted / other), np.nan)
    is_lower = (other <= 0.0).mean(axis=0) >= MISSED_SHARE
    is_told = (is_physical.sum(axis=0) >= FEWEST_DRAWS) & ((wanted <= 0.0).mean(axis=0) < MISSED_SHARE)
    er_db = np.where(is_told, er_db, 0.0)
    tail = 0.5 * (1.0 - confidence)
    low, median, high, one_sided = np.nanquantile(er_db, [tail, 0.5, 1.0 - tail, 1.0 - confidence], axis=0)
    sigma = np.where(is_lower, np.nan, np.nanstd(er_db, axis=0))
    found = (np.where(is_lower, one_sided, median), sigma, np.where(is_lower, one_sided, low), np.where(is_lower, np.nan, high))
    return ErDraws(*(np.where(is_told, part, np.nan) for part in found), is_lower & is_told, is_physical.mean(axis=0))


def _drawn_powers(m: TwoPortMeasurement, random: np.random.Generator, draws: int) -> tuple[FloatArray, FloatArray]:
    """Draws of the wanted and the other power, shape (draws, …)."""
    shape = np.broadcast_shapes(np.shape(m.reading1), np.shape(m.reading2))

    def drawn(value: Any, sigma: Any) -> FloatArray:
        return np.asarray(value, dtype=np.float64) + np.asarray(sigma) * random.standard_normal((draws, *shape))

    def shared(value: Any, sigma: Any) -> FloatArray:
        one_each = (draws,) + (1,) * len(shape)
        return np.asarray(value, dtype=np.float64) + np.asarray(sigma) * random.standard_normal(one_each)

    first = drawn(m.reading1, m.reading1_sigma) - shared(m.zero1, m.zero1_sigma)
    second = (drawn(m.reading2, m.reading2_sigma) - shared(m.zero2, m.zero2_sigma)) * shared(m.gain_ratio, m.gain_ratio_sigma)
    if m.leakage is not None:
        entries = np.asarray(m.leakage, dtype=np.float64)
        unsure = np.zeros((2, 2)) if m.leakage_sigma is None else np.asarray(m.leakage_sigma, dtype=np.float64)
        a, b, c, d = (shared(entries[row, column], unsure[row, column]) for row in (0, 1) for column in (0, 1))
        scale = 1.0 / (a * d - b * c)
        first, second = scale * (d * first - b * second), scale * (a * second - c * first)
    return (second, first) if m.wanted_port == 2 else (first, second)


def noise_bias_db(relative_sigma: Any) -> FloatArray:
    """How much too high the mean of ER values in dB comes out of a noisy weak port, dB.

    Args:
        relative_sigma: u/P of the weak port, any shape; good to 0.2.
    Returns:
        (10 / ln 10) r^2 / 2. Average powers instead and there is none. Source: docs/formulas.md, F-24.
    """
    return 0.5 * DB_PER_NEPER_OF_POWER * np.square(np.asarray(relative_sigma, dtype=np.float64))


def er_db_of_sums(wanted: Any, other: Any) -> FloatArray:
    """ER of averaged powers, dB: 10 log10(sum wanted / sum other) over the last axis; NaN samples are left out in pairs.

    Never the mean of dB values. NaN where a sum is not above 0. Source: docs/formulas.md, F-16.
    """
    wanted, other = np.broadcast_arrays(np.asarray(wanted, dtype=np.float64), np.asarray(other, dtype=np.float64))
    both = np.isfinite(wanted) & np.isfinite(other)
    top, bottom = np.where(both, wanted, 0.0).sum(axis=-1), np.where(both, other, 0.0).sum(axis=-1)
    return db_from_ratio(np.where((top > 0.0) & (bottom > 0.0), top / np.where(bottom > 0.0, bottom, 1.0), np.nan))
