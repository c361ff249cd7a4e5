"""The highest ER that a bench can honestly claim: one function per cause, and the joint ceiling.

A ceiling is the ER that would be said of light without any leak. A cause that is corrected for limits by its
uncertainty, one that is not by its whole size. All shapes broadcast; powers in one linear unit. Ceilings are in dB,
inf where the cause is absent. Source: docs/formulas.md, F-26, F-27.
"""

from dataclasses import dataclass
from enum import StrEnum
from typing import Any

import numpy as np

from analysis.quantities import FloatArray
from analysis.reduce.extinction import CONFIDENCE, upper_limit
from analysis.reduce.leakage import PortNets, without_leakage


class CeilingCause(StrEnum):
    ZERO = "zero"
    NOISE = "noise"
    STEP = "step"
    LEAKAGE = "leakage"
    LEAKAGE_ERROR = "leakage error"


@dataclass(frozen=True, slots=True)
class JointCeiling:
    """``er_db`` that all causes together leave, dB; ``by_cause_db`` each alone; ``worst`` the lowest of these."""

    er_db: float
    by_cause_db: dict[CeilingCause, float]
    worst: CeilingCause


def er_ceiling_db_from_zero(bright: Any, zero_error: Any) -> FloatArray:
    """Ceiling from a zero of the dark port that is wrong by ``zero_error`` (its size, sign aside), dB."""
    return _ceiling_db(np.abs(np.asarray(zero_error, dtype=np.float64)) / _above_zero("bright", bright))


def er_ceiling_db_from_noise(bright: Any, sigma: Any, *, confidence: float = CONFIDENCE) -> FloatArray:
    """Ceiling from noise or any other uncertainty of the dark port's net: the bound said of a net that reads 0, dB.

    Args:
        bright: Net power of the bright port; ``sigma``: 1 sigma of the dark port's net, same unit.
    Returns:
        10 log10(bright / upper limit of 0): at 95 % the limit is 1.96 sigma. Source: F-06, F-26.
    """
    return _ceiling_db(_limit_of_nothing(sigma, confidence) / _above_zero("bright", bright))


def er_ceiling_db_from_step(bright: Any, step: Any) -> FloatArray:
    """Ceiling from the converter: nothing below one step is seen, dB."""
    return _ceiling_db(np.asarray(step, dtype=np.float64) / _above_zero("bright", bright))


def er_ceiling_db_from_leakage(leakage: Any, *, wanted_port: int = 1) -> float:
    """Highest ER that a splitter of [[a, b], [c, d]] can show while its leakage is not taken off, dB.

    10 log10(a/c) with the wanted light in port 1, 10 log10(d/b) in port 2; inf without leakage. Source: F-26.
    """
    return float(_ceiling_db(_leak_shown(leakage, wanted_port)))


def er_ceiling_db_from_leakage_error(
    leakage: Any, leakage_sigma: Any, *, wanted_port: int = 1, confidence: float = CONFIDENCE
) -> float:
    """Ceiling that is left after the leakage has been taken off, from the uncertainty of its entries, dB. Source: F-22."""
    return float(_ceiling_db(_limit_of_nothing(_leak_error(leakage, leakage_sigma, wanted_port), confidence)))


def joint_er_ceiling(
    bright: float,
    *,
    zero_sigma: float = 0.0,
    noise_sigma: float = 0.0,
    step: float = 0.0,
    leakage: Any = None,
    leakage_sigma: Any = None,
    is_leakage_taken_off: bool = True,
    wanted_port: int = 1,
    confidence: float = CONFIDENCE,
) -> JointCeiling:
    """The highest ER this bench can honestly claim.

    Uncertainties of the dark net add in squares (a step counts as step / sqrt(12), GUM type B); leakage that is not
    taken off adds in full, because it is no uncertainty.

    Args:
        bright: Net power of the bright port, above 0; all powers in one linear unit.
        zero_sigma, noise_sigma: 1 sigma of the dark port's zero and of its reading.
        step: Smallest step of its converter.
        leakage, leakage_sigma, wanted_port: As `analysis.reduce.two_port.TwoPortMeasurement`, shape (2, 2).
        is_leakage_taken_off: Whether the reduction inverts the matrix.
        confidence: Level of the bound.
    Returns:
        See `JointCeiling`; inf where nothing limits. Source: docs/formulas.md, F-27.
    Raises:
        ValueError: ``bright`` is not above 0, or an uncertainty is negative.
    """
    bright = float(_above_zero("bright", bright))
    for name, value in (("zero_sigma", zero_sigma), ("noise_sigma", noise_sigma), ("step", step)):
        if not value >= 0.0:
            raise ValueError(f"{name}={value!r} must be 0 or above; give a size without sign.")
    shown = error = 0.0
    if leakage is not None and is_leakage_taken_off:
        error = 0.0 if leakage_sigma is None else _leak_error(leakage, leakage_sigma, wanted_port)
    elif leakage is not None:
        shown = _leak_shown(leakage, wanted_port)
    unsure = np.sqrt((zero_sigma / bright) ** 2 + (noise_sigma / bright) ** 2 + (step / bright) ** 2 / 12.0 + error**2)
    joint_db = float(_ceiling_db(shown + _limit_of_nothing(unsure, confidence)))
    by_cause_db = {
        CeilingCause.ZERO: float(er_ceiling_db_from_noise(bright, zero_sigma, confidence=confidence)),
        CeilingCause.NOISE: float(er_ceiling_db_from_noise(bright, noise_sigma, confidence=confidence)),
        CeilingCause.STEP: float(er_ceiling_db_from_noise(bright, step / np.sqrt(12.0), confidence=confidence)),
        CeilingCause.LEAKAGE: float(_ceiling_db(shown)),
        CeilingCause.LEAKAGE_ERROR: float(_ceiling_db(_limit_of_nothing(error, confidence))),
    }
    return JointCeiling(joint_db, by_cause_db, min(by_cause_db, key=by_cause_db.__getitem__))


def er_ceiling_db_from_dop(dop: Any) -> FloatArray:
    """Highest port ER of light of a degree of polarization, dB: 10 log10((1 + p)/(1 - p)).

    Args:
        dop: In [0, 1], any shape; 1 gives inf; above 1 (a calibration fault) NaN. Source: docs/formulas.md, F-13.
    """
    dop = np.asarray(dop, dtype=np.float64)
    inside = np.where((dop >= 0.0) & (dop <= 1.0), dop, np.nan)
    return _ceiling_db((1.0 - inside) / (1.0 + inside))


def dop_needed(er_db: Any) -> FloatArray:
    """Lowest degree of polarization that allows an ER in dB: tanh(ER ln 10 / 20); any shape. Inverse of the ceiling."""
    return np.tanh(np.asarray(er_db, dtype=np.float64) * (np.log(10.0) / 20.0))


def _leak_shown(leakage: Any, wanted_port: int) -> float:
    matrix = _matrix(leakage, wanted_port)
    return float(matrix[1, 0] / matrix[0, 0] if wanted_port == 1 else matrix[0, 1] / matrix[1, 1])


def _leak_error(leakage: Any, leakage_sigma: Any, wanted_port: int) -> float:
    """1 sigma of the leak found for light without any leak: its readings are a column of the matrix."""
    matrix = _matrix(leakage, wanted_port)
    seen = matrix[:, wanted_port - 1]
    nets = without_leakage(PortNets(seen[0], seen[1], np.zeros(()), np.zeros(()), 0.0), matrix, leakage_sigma)
    return float(nets.second_sigma if wanted_port == 1 else nets.first_sigma)


def _matrix(leakage: Any, wanted_port: int) -> FloatArray:
    matrix = np.asarray(leakage, dtype=np.float64)
    if matrix.shape != (2, 2):
        raise ValueError(f"leakage has shape {matrix.shape}; give [[a, b], [c, d]].")
    if wanted_port not in (1, 2):
        raise ValueError(f"wanted_port={wanted_port!r} is not a port; give 1 or 2.")
    return matrix


def _limit_of_nothing(sigma: Any, confidence: float) -> FloatArray:
    """Upper limit of a power whose net reads 0; it is a fixed multiple of sigma (1.96 at 95 %)."""
    return np.asarray(sigma, dtype=np.float64) * float(upper_limit(np.zeros(()), np.ones(()), confidence))


def _above_zero(name: str, value: Any) -> FloatArray:
    value = np.asarray(value, dtype=np.float64)
    if not (value > 0.0).all():
        raise ValueError(f"{name} is not above 0; give the net power of the bright port.")
    return value


def _ceiling_db(leak: Any) -> FloatArray:
    leak = np.asarray(leak, dtype=np.float64)
    with np.errstate(divide="ignore"):
        return -10.0 * np.log10(np.where(leak >= 0.0, leak, np.nan))
