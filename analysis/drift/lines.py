"""Spectral lines in unevenly spaced readings: Lomb–Scargle with floating mean and false-alarm levels."""

from dataclasses import dataclass
from enum import StrEnum
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy import signal, special

from analysis.drift.background import red_background
from analysis.drift.trig_sums import trig_sums
from analysis.quantities import US_PER_S, FloatArray, IntArray

OVERSAMPLING: Final = 5
_RED_RATIO = 4.0


class Background(StrEnum):
    """What a line must stand out from."""

    WHITE = "white noise"
    RED = "red noise"


@dataclass(frozen=True, slots=True)
class Line:
    """A sine in the readings.

    Attributes:
        frequency_hz, frequency_se_hz: Frequency and its standard error, Hz. ``period_s``: its inverse, s.
        amplitude, amplitude_se: Of the sine, unit of the level. ``power``: share of the variance it explains, 0 … 1.
        false_alarm: Chance that noise alone gives so high a peak anywhere in the range searched.
    """

    frequency_hz: float
    frequency_se_hz: float
    amplitude: float
    amplitude_se: float
    power: float
    false_alarm: float

    @property
    def period_s(self) -> float:
        """Period, s."""
        return 1.0 / self.frequency_hz


@dataclass(frozen=True, slots=True)
class LineSearch:
    """Lines found, strongest first; ``is_background_red``: low frequencies carry over 4 times the power of high ones.

    False-alarm levels against white noise mean nothing where the background is red: search against red noise then.
    """

    lines: tuple[Line, ...]
    is_background_red: bool
    low_hz: float
    high_hz: float


def find_lines(
    at_us: IntArray,
    level: FloatArray,
    *,
    high_hz: float,
    background: Background = Background.WHITE,
    false_alarm: float = 0.01,
    most: int = 5,
) -> LineSearch:
    """Search for lines, take the strongest off, search again.

    Args:
        at_us: Times, µs, shape (N,), rising; any spacing, gaps need nothing.
        level: Readings, shape (N,); NaN is left out. At least 20 readings.
        high_hz: Highest frequency searched, Hz; beyond half the sampling rate evenly spaced readings only show images.
        background: Against red noise a line must stand out from its neighbours in frequency, and frequencies below 6 per
            record are not searched: there a wander and a line cannot be told apart.
        false_alarm: Highest chance at which a line is named. ``most``: most lines named.
    Raises:
        ValueError: Shapes differ, fewer than 20 readings, or ``high_hz`` under 12 per record.
    Source: docs/formulas.md, F-78 to F-80.
    """
    at_s, level = _prepared(at_us, level, high_hz)
    span_s = float(at_s[-1] - at_s[0])
    step_hz = 1.0 / (OVERSAMPLING * span_s)
    count = int(high_hz / step_hz)
    frequency_hz = step_hz * np.arange(1, count + 1)
    is_red, lines, left, window = False, [], level, window_sums(at_s, step_hz, count)
    for turn in range(most):
        power = grid_power(at_s, left, step_hz, count, window=window)
        if turn == 0:
            is_red = _is_red(power)
        chance = _chances(at_s, power, frequency_hz, background)
        best = int(np.argmin(np.where(chance > 0.0, chance, -power)))
        if not chance[best] <= false_alarm:
            break
        line, left = _fitted(at_s, left, frequency_hz[best], step_hz, float(chance[best]))
        lines.append(line)
    first = step_hz if background is Background.WHITE else 6.0 / span_s
    return LineSearch(tuple(lines), is_red, first, high_hz)


def power_at(at_s: FloatArray, level: FloatArray, frequency_hz: FloatArray) -> FloatArray:
    """Share of the variance that a sine of each frequency explains beside a free mean, 0 … 1.

    Args:
        at_s: Times, s, shape (N,); ``level``: finite, shape (N,). ``frequency_hz``: above 0, shape (F,), any order.
    Returns:
        Shape (F,). Lomb–Scargle with floating mean ("standard" power). Source: docs/formulas.md, F-78.
    """
    turns = 2.0 * np.pi * np.asarray(frequency_hz, np.float64)
    at_s = np.asarray(at_s, np.float64)
    found = signal.lombscargle(at_s - at_s[0], level - np.mean(level), turns, normalize=True, floating_mean=True)
    return np.reshape(found, turns.shape)


def grid_power(
    at_s: FloatArray, level: FloatArray, step_hz: float, count: int, *, window: NDArray[np.complex128] | None = None
) -> FloatArray:
    """`power_at` the frequencies step, 2 step, … count·step, by fast trigonometric sums, shape (count,).

    ``window``: `window_sums` of the same times, where they were made before. Source: docs/formulas.md, F-78.
    """
    at_s, level = at_s - at_s[0], level - np.mean(level)
    one = window_sums(at_s, step_hz, count) if window is None else window
    mixed = trig_sums(at_s, level, step_hz, count) / len(at_s)
    double, one = one[1::2], one[:count]
    cc = 0.5 * (1.0 + double.real) - one.real**2
    ss = 0.5 * (1.0 - double.real) - one.imag**2
    cs = 0.5 * double.imag - one.real * one.imag
    determinant = cc * ss - cs**2
    explained = (mixed.real**2 * ss + mixed.imag**2 * cc - 2.0 * mixed.real * mixed.imag * cs) / np.maximum(determinant, 1e-300)
    explained = np.where(determinant > 1e-12, explained, 0.0)
    variance = float(np.mean(level**2))
    return np.clip(explained / variance, 0.0, 1.0) if variance > 0.0 else np.zeros(count)


def window_sums(at_s: FloatArray, step_hz: float, count: int) -> NDArray[np.complex128]:
    """Mean of e^{2πi f (t - t₀)} up to 2 count·step, which only the times decide, shape (2 count,)."""
    return trig_sums(at_s - at_s[0], np.ones(len(at_s)), step_hz, 2 * count) / len(at_s)


def false_alarm_chance(power: FloatArray, at_s: FloatArray, high_hz: float) -> FloatArray:
    """Chance that white noise gives a peak of this power anywhere up to ``high_hz`` (upper bound), shape of ``power``.

    Baluev (2008) for a floating mean: 1 - (1 - f₁) e^{-τ}. Against red noise it means nothing. Source: docs/formulas.md, F-79.
    """
    power, count = np.asarray(power, np.float64), len(at_s)
    single = single_chance(power, count)
    width = high_hz * np.sqrt(4.0 * np.pi * np.var(at_s))
    gamma = np.sqrt(2.0 / (count - 1)) * np.exp(special.gammaln(0.5 * (count - 1)) - special.gammaln(0.5 * (count - 2)))
    tau = gamma * width * (1.0 - power) ** (0.5 * (count - 4)) * np.sqrt(0.5 * (count - 1) * power)
    return -np.expm1(np.log1p(-np.minimum(single, 1.0 - 1e-16)) - tau)


def single_chance(power: FloatArray, count: int) -> FloatArray:
    """Chance of such a power at one frequency chosen beforehand: (1 - z)^((N - 3)/2). Source: docs/formulas.md, F-79."""
    return (1.0 - np.asarray(power, np.float64)) ** (0.5 * (count - 3))


def _chances(at_s: FloatArray, power: FloatArray, frequency_hz: FloatArray, background: Background) -> FloatArray:
    if background is Background.WHITE:
        return false_alarm_chance(power, at_s, float(frequency_hz[-1]))
    return red_background(power, OVERSAMPLING).chance


def _fitted(at_s: FloatArray, level: FloatArray, start_hz: float, step_hz: float, chance: float) -> tuple[Line, FloatArray]:
    """The sine of least squares near a grid frequency, and what it leaves."""
    near = start_hz + step_hz * np.linspace(-0.9, 0.9, 13)
    power = power_at(at_s, level, near)
    top = min(max(int(np.argmax(power)), 1), len(near) - 2)
    before, highest, after = power[top - 1:top + 2]
    bend = before - 2.0 * highest + after
    frequency = float(near[top] + (0.5 * (before - after) / bend * (near[1] - near[0]) if bend < 0.0 else 0.0))
    phase = 2.0 * np.pi * frequency * (at_s - at_s[0])
    design = np.stack([np.ones_like(phase), np.cos(phase), np.sin(phase)], axis=1)
    term = np.linalg.lstsq(design, level, rcond=None)[0]
    left = level - design @ term
    amplitude, noise = float(np.hypot(term[1], term[2])), float(np.sqrt(left @ left / (len(level) - 5)))
    error = noise * np.sqrt(2.0 / len(level))
    span_s = float(at_s[-1] - at_s[0])
    frequency_error = float(np.sqrt(6.0 / len(level)) * noise / (np.pi * span_s * amplitude)) if amplitude > 0.0 else np.inf
    return Line(frequency, frequency_error, amplitude, float(error), float(np.max(power)), chance), left + term[0]


def _is_red(power: FloatArray) -> bool:
    """Mean power of the lowest tenth, its strongest peaks left out, against the highest half."""
    low = np.sort(power[:max(len(power) // 10, OVERSAMPLING)])
    usual_low = float(np.median(low))
    return usual_low > _RED_RATIO * float(np.median(power[len(power) // 2:]))


def _prepared(at_us: IntArray, level: FloatArray, high_hz: float) -> tuple[FloatArray, FloatArray]:
    if np.shape(at_us) != np.shape(level):
        raise ValueError(f"at_us has shape {np.shape(at_us)}, level {np.shape(level)}; pass one time per reading.")
    known = np.isfinite(level)
    if known.sum() < 20:
        raise ValueError(f"level holds {int(known.sum())} readings; lines need 20 or more.")
    at_us, level = at_us[known], np.asarray(level, np.float64)[known]
    at_s = (at_us - at_us[0]) / US_PER_S
    if not high_hz * at_s[-1] >= 12.0:
        raise ValueError(f"high_hz={high_hz!r} must be 12 per record or more; the record lasts {at_s[-1]:.6g} s.")
    return at_s, level
