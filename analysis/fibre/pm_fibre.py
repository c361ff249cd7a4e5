"""Polarization-maintaining fibre between two imperfect ends."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

BIREFRINGENCE_SLOPE_PER_K = -5.93e-7
"""dB/dT giving 2.4 rad/(K m) at 1550 nm; published -5.3e-7 … -5.9e-7 (Opt. Lett. 36, 2173 (2011), abstract)."""


def beat_length_m(birefringence: float, wavelength_m: float) -> float:
    """Length over which the two axes slip by one turn, m: wavelength / B (definition)."""
    return wavelength_m / birefringence


def phase_rad(length_m: float, beat_length: float) -> float:
    """Phase between the axes after a length, rad: 2π L / L_B."""
    return 2.0 * np.pi * length_m / beat_length


def phase_slope_rad_per_k(length_m: float, wavelength_m: float, slope_per_k: float = BIREFRINGENCE_SLOPE_PER_K) -> float:
    """Change of that phase with temperature, rad/K: 2π L (dB/dT) / wavelength (the fibre's own expansion left out)."""
    return 2.0 * np.pi * length_m * slope_per_k / wavelength_m


def er_of_coupling_db(h_per_m: float, length_m: float) -> float:
    """ER that distributed coupling alone leaves, dB: -10 log10 tanh(h L).

    Source: coupled-power equations dPx/dz = -h (Px - Py), from memory; re-derived.
    """
    return float(-10.0 * np.log10(np.tanh(h_per_m * length_m)))


@dataclass(frozen=True, slots=True, kw_only=True)
class PmLink:
    """A PM cord with its axes misaligned by ``launch_rad`` at the start and ``exit_rad`` at the splitter (physical)."""

    launch_rad: float
    exit_rad: float

    def crossed_fraction(self, phase: ArrayLike, launch_rad: ArrayLike | None = None) -> FloatArray:
        """Share of the light in the unwanted port.

        Args:
            phase: Phase between the fibre's axes, rad, shape (N,).
            launch_rad: Misalignment at the start where it changes with time, rad, shape (N,).
        Returns:
            sin²α cos²β + cos²α sin²β - ½ sin 2α sin 2β cos φ, shape (N,): between sin²(α-β) and sin²(α+β).
        Source: product of two rotations and one retarder (Jones), derived; the test compares it with that product.
        """
        alpha = np.asarray(self.launch_rad if launch_rad is None else launch_rad, float)
        beta = self.exit_rad
        steady = np.sin(alpha) ** 2 * np.cos(beta) ** 2 + np.cos(alpha) ** 2 * np.sin(beta) ** 2
        return steady - 0.5 * np.sin(2 * alpha) * np.sin(2 * beta) * np.cos(np.asarray(phase, float))
