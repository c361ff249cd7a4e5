"""The pseudo-random set of NIST SP 1065 (2008), sec. 12.4."""

import numpy as np


def lcg_1000():
    """Its 1000 points."""
    return lcg_values(1000)


def lcg_values(count):
    """n(i+1) = 16807 n(i) mod (2^31 - 1), n0 = 1234567890, over the modulus; n0 included."""
    n, values = 1234567890, []
    for _ in range(count):
        values.append(n / 2147483647)
        n = 16807 * n % 2147483647
    return np.array(values)
