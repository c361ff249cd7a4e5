"""Deterministic uniform numbers that any program can make again."""

import numpy as np


def uniforms(count: int) -> np.ndarray:
    """The generator of NIST SP 1065 (2008), sec. 12.4, without its start: n(i+1) = 16807 n(i) mod (2^31 - 1), n0 = 1234567890."""
    n, values = 1234567890, np.empty(count)
    for k in range(count):
        n = 16807 * n % 2147483647
        values[k] = n / 2147483647
    return values
