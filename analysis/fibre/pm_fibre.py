"""Polarization-maintaining fibre between two imperfect ends.

For reading what a cord does to the light. labmon computes settings for no element, and drives none.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from analysis.quantities import FloatArray, er_db_from_angle_rad, leak_from_er_db

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


def relative_slope_per_k(birefringence: float, slope_per_k: float = BIREFRINGENCE_SLOPE_PER_K,
                         expansion_per_k: float = 0.0) -> float:
    """γ = (1/B) dB/dT + α, 1/K: relative change of the phase with temperature, α the fibre's expansion. Source: F-111."""
    return slope_per_k / birefringence + expansion_per_k


def kelvin_per_turn(length_m: ArrayLike, beat_length: ArrayLike, relative_slope: ArrayLike) -> FloatArray:
    """Change of temperature that turns the phase once round.

    Args:
        length_m, beat_length: Length of the cord and L_B, m. relative_slope: γ, 1/K (must be measured per fibre); broadcast.
    Returns:
        L_B/(L |γ|), K, above 0; inf for a cord without temperature response or length.
    Source: docs/formulas.md, F-111.
    """
    with np.errstate(divide="ignore"):
        return np.asarray(beat_length, np.float64) / np.abs(np.asarray(length_m, np.float64) * relative_slope)


def er_of_coupling_db(h_per_m: ArrayLike, length_m: ArrayLike) -> FloatArray:
    """ER that distributed coupling alone leaves: -10 log10 tanh(h L), dB, 0 for long cords; inf for h L = 0, NaN below 0.

    Args:
        h_per_m: Coupling parameter h, 1/m. length_m: Length, m; broadcast.
    Source: docs/formulas.md, F-112.
    """
    coupled = np.asarray(h_per_m, np.float64) * length_m
    with np.errstate(divide="ignore"):
        return -10.0 * np.log10(np.tanh(np.where(coupled >= 0.0, coupled, np.nan)))


def coupling_of_er_per_m(er_db: ArrayLike, length_m: ArrayLike) -> FloatArray:
    """h-parameter, 1/m, of the ER that coupling alone leaves after a length, m; NaN at or below 0 dB. Source: F-112."""
    leak = leak_from_er_db(er_db)
    return np.arctanh(np.where(leak < 1.0, leak, np.nan)) / np.asarray(length_m, np.float64)


@dataclass(frozen=True, slots=True)
class ErRange:
    """ER over a whole turn of the phase, dB: ``worst_db``, and ``best_db``, inf where the ends can cancel."""

    worst_db: FloatArray
    best_db: FloatArray


def er_range_db(launch_rad: ArrayLike, exit_rad: ArrayLike = 0.0) -> ErRange:
    """Best and worst ER that a cord passes through as temperature turns its phase.

    Args:
        launch_rad, exit_rad: Misalignment of launch and of splitter against the cord's axis, rad (physical, any sign), broadcast.
    Returns:
        `ErRange`: on the sphere the light circles the cord's axis at 2α and the splitter stands 2β away, so that the angle
        from the wanted state runs from 2||α| - |β|| to 2(|α| + |β|); at π all light is in the other port. NaN for NaN.
    Source: docs/formulas.md, F-111.
    """
    launch, leaving = np.abs(np.asarray(launch_rad, np.float64)), np.abs(np.asarray(exit_rad, np.float64))
    far, near = 2.0 * (launch + leaving), 2.0 * np.abs(launch - leaving)
    return ErRange(er_db_from_angle_rad(np.minimum(far, np.pi)), er_db_from_angle_rad(near))


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
