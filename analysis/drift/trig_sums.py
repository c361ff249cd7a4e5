"""Sums of sines and cosines at many frequencies, by spreading uneven times onto a fine grid."""

import numpy as np
from scipy import fft, special

from analysis.quantities import FloatArray

_WIDTH = 12  # grid points under the kernel; with twice as many points as frequencies the error is near 1e-11
_BETA = 2.30 * _WIDTH


def trig_sums(at_s: FloatArray, weight: FloatArray, step_hz: float, count: int) -> FloatArray:
    """Σ w e^{2πi f t} at f = step, 2 step, … count·step.

    Args:
        at_s: Times, s, shape (N,), any spacing and order. ``weight``: shape (N,).
        step_hz: Spacing of the frequencies, Hz. ``count``: how many.
    Returns:
        Complex, shape (count,): real part Σ w cos, imaginary part Σ w sin; relative error about 1e-11 of Σ|w|.
    Source: docs/formulas.md, F-78 (Kaiser–Bessel gridding and one fast Fourier transform).
    """
    size = fft.next_fast_len(max(4 * (count + 1), 2 * _WIDTH), real=True)
    place = np.mod(np.asarray(at_s, np.float64) * step_hz, 1.0) * size
    first = np.ceil(place - 0.5 * _WIDTH).astype(np.int64)
    cell = first + np.arange(_WIDTH)[:, None]
    height = _BETA * np.sqrt(np.maximum(1.0 - ((cell - place) * (2.0 / _WIDTH)) ** 2, 0.0))
    kernel = special.i0e(height) * np.exp(height - _BETA) * weight
    grid = np.bincount(np.mod(cell, size).ravel(), kernel.ravel(), size)
    spectrum = np.conj(fft.rfft(grid)[1:count + 1])
    wave = np.sqrt(_BETA**2 - (np.pi * _WIDTH * np.arange(1, count + 1) / size) ** 2)
    shape = _WIDTH * np.sinh(wave) / wave * np.exp(-_BETA)
    return spectrum / shape
