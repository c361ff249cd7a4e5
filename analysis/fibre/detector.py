"""A polarization splitter with two detectors, as a station reads it."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
ZERO_DOUBLES_PER_K = 10.0
"""A reverse-biased photodiode's dark current doubles per about 10 K (makers' application notes on photodiodes)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Detector:
    """One port's detector; powers in W, readings in the station's raw unit."""

    units_per_w: float = 1.0
    zero: float = 0.0
    zero_reference_c: float = 21.0
    noise: float = 0.0
    top: float = np.inf
    step: float = 0.0

    def zero_at(self, temperature_c: FloatArray) -> FloatArray:
        """Reading without light, raw unit, shape (N,): it doubles every ``ZERO_DOUBLES_PER_K``."""
        return self.zero * 2.0 ** ((temperature_c - self.zero_reference_c) / ZERO_DOUBLES_PER_K)

    def read(self, power_w: FloatArray, temperature_c: FloatArray, white: FloatArray) -> FloatArray:
        """Readings of a power.

        Args:
            power_w: Light on the detector, W, shape (N,).
            temperature_c: Its temperature, °C, shape (N,).
            white: Unit white noise, shape (N,).
        Returns:
            Raw readings, shape (N,): zero and noise added, rounded to ``step``, clipped at ``top``.
        """
        raw = self.units_per_w * power_w + self.zero_at(temperature_c) + self.noise * white
        if self.step > 0.0:
            raw = np.round(raw / self.step) * self.step
        return np.minimum(raw, self.top)


def split_powers(total_w: FloatArray, crossed_fraction: FloatArray, leakage: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Powers in the two ports of a real splitter.

    Args:
        total_w: Power before the splitter, W, shape (N,).
        crossed_fraction: Share of it in the unwanted state, shape (N,).
        leakage: [[a, b], [c, d]], shape (2, 2): ports = leakage @ (wanted, unwanted).
    Returns:
        Powers of port 1 and port 2, W, each shape (N,).
    """
    wanted, unwanted = total_w * (1.0 - crossed_fraction), total_w * crossed_fraction
    return (leakage[0, 0] * wanted + leakage[0, 1] * unwanted, leakage[1, 0] * wanted + leakage[1, 1] * unwanted)
