"""Where mains hum appears when it is sampled too slowly, and which lines it could explain."""

import math
from dataclasses import dataclass
from typing import Final

from analysis.quantities import FloatArray

MAINS_TOLERANCE_HZ: Final = 0.2
MAINS_HZ: Final = (50.0, 60.0)
HARMONICS: Final = (1, 2, 4)


def alias_hz(frequency_hz: float, sampling_hz: float) -> float:
    """Frequency at which a line appears in samples, Hz in [0, f_s/2]: |f - f_s round(f/f_s)|. Source: docs/formulas.md, F-81."""
    if not (sampling_hz > 0.0 and math.isfinite(frequency_hz)):
        raise ValueError(f"sampling_hz={sampling_hz!r} must be above 0 and frequency_hz={frequency_hz!r} finite.")
    return abs(math.remainder(frequency_hz, sampling_hz))


def averaging_gain(frequency_hz: float, averaging_s: float) -> float:
    """Share of a line's amplitude that remains when each sample averages over ``averaging_s``: |sinc(f t)|. Source: F-82."""
    turns = math.pi * frequency_hz * averaging_s
    return abs(math.sin(turns) / turns) if turns else 1.0


@dataclass(frozen=True, slots=True)
class HumAlias:
    """Image of one harmonic of the mains: it may lie anywhere from ``low_hz`` to ``high_hz``, nominally at ``nominal_hz``."""

    mains_hz: float
    harmonic: int
    nominal_hz: float
    low_hz: float
    high_hz: float


def hum_aliases(
    sampling_hz: float, *, mains_hz: float, tolerance_hz: float = MAINS_TOLERANCE_HZ, harmonics: tuple[int, ...] = HARMONICS
) -> tuple[HumAlias, ...]:
    """Images of the mains' harmonics in samples taken at ``sampling_hz``.

    Args:
        sampling_hz: Sampling rate, Hz; its own error of 1e-4 moves the image of 100 Hz by 0.01 Hz.
        mains_hz: Nominal mains frequency, Hz. ``tolerance_hz``: how far it wanders to either side, Hz.
        harmonics: 2 is the ripple of lamps and rectifiers (100 or 120 Hz).
    Source: docs/formulas.md, F-81.
    """
    found = []
    for harmonic in harmonics:
        low, high = harmonic * (mains_hz - tolerance_hz), harmonic * (mains_hz + tolerance_hz)
        ends = [alias_hz(low, sampling_hz), alias_hz(high, sampling_hz)]
        if math.floor(low / sampling_hz) != math.floor(high / sampling_hz):
            ends.append(0.0)
        if math.floor(low / sampling_hz - 0.5) != math.floor(high / sampling_hz - 0.5):
            ends.append(0.5 * sampling_hz)
        found.append(HumAlias(mains_hz, harmonic, alias_hz(harmonic * mains_hz, sampling_hz), min(ends), max(ends)))
    return tuple(found)


@dataclass(frozen=True, slots=True)
class HumMatch:
    """A line that the mains could explain.

    Attributes:
        line_hz: The line. ``mains_hz``, ``harmonic``: what explains it. ``implied_mains_hz``: mains frequency that puts the
        image exactly there, the nearest to nominal. ``period_s``: period of the line, s.
        chance: Share of the band 0 … f_s/2 that the images cover, so the chance that any line fits; near 1 a fit says nothing.
    """

    line_hz: float
    mains_hz: float
    harmonic: int
    implied_mains_hz: float
    period_s: float
    chance: float


def explain_lines(
    lines_hz: FloatArray | list[float],
    sampling_hz: float,
    *,
    mains_hz: float,
    tolerance_hz: float = MAINS_TOLERANCE_HZ,
    harmonics: tuple[int, ...] = HARMONICS,
    line_se_hz: float = 0.0,
) -> tuple[HumMatch, ...]:
    """Which lines fit an image of the mains, each with the harmonic that needs the least departure from nominal.

    Args:
        lines_hz: Frequencies found, Hz, each in [0, f_s/2]. ``line_se_hz``: their standard error; 2 of them are allowed.
        sampling_hz, mains_hz, tolerance_hz, harmonics: As `hum_aliases`.
    Returns:
        The lines that fit, in the order given; those that do not are absent. A fit is no proof: see ``chance``; the mains'
        wander, common to all taps of a building, or another sampling rate decides. Source: docs/formulas.md, F-81.
    """
    aliases = hum_aliases(sampling_hz, mains_hz=mains_hz, tolerance_hz=tolerance_hz, harmonics=harmonics)
    chance = covered_share(aliases, sampling_hz)
    found = []
    for line_hz in lines_hz:
        implied = [(_implied(line_hz, sampling_hz, mains_hz, harmonic), harmonic) for harmonic in harmonics]
        fitting = [(abs(mains - mains_hz), harmonic, mains) for mains, harmonic in implied
                   if abs(mains - mains_hz) <= tolerance_hz + 2.0 * line_se_hz / harmonic]
        if fitting:
            _, harmonic, mains = min(fitting)
            found.append(HumMatch(float(line_hz), mains_hz, harmonic, mains, 1.0 / line_hz if line_hz else math.inf, chance))
    return tuple(found)


def covered_share(aliases: tuple[HumAlias, ...], sampling_hz: float) -> float:
    """Share of the band 0 … f_s/2 that the images can reach, overlaps counted once, 0 … 1."""
    total, reached = 0.0, 0.0
    for low, high in sorted((alias.low_hz, alias.high_hz) for alias in aliases):
        total += max(high - max(low, reached), 0.0)
        reached = max(reached, high)
    return min(total / (0.5 * sampling_hz), 1.0)


def _implied(line_hz: float, sampling_hz: float, mains_hz: float, harmonic: int) -> float:
    """Mains frequency nearest to nominal whose harmonic appears at ``line_hz``."""
    near = round(harmonic * mains_hz / sampling_hz)
    wanted = [(turn * sampling_hz + side * line_hz) / harmonic for turn in (near - 1, near, near + 1) for side in (-1, 1)]
    return min(wanted, key=lambda mains: abs(mains - mains_hz))
