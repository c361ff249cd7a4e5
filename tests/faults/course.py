"""Forty seconds of light with two excursions, and the episodes that they must give, worked out by hand."""

from dataclasses import dataclass

import numpy as np

from analysis.quantities import FloatArray, IntArray

STEP_US = 250_000
#: The first sample of each second, behind the whole second.
OFFSET_US = 100_000
Segments = tuple[tuple[float, int], ...]
#: (extinction ratio in dB, whole seconds that it holds).
SEGMENTS: Segments = ((30.0, 5), (18.0, 2), (30.0, 3), (18.0, 6), (30.0, 5), (22.0, 5), (18.0, 5), (30.0, 9))
DURATION_S = sum(seconds for _, seconds in SEGMENTS)
#: Limits that mean the same light: 20 dB is 11.4 degrees on the sphere, 23 dB is 8.1 (tan²(γ/2) = 10^(−ER/10)).
DELAYS = {"on_delay_s": 3.0, "off_delay_s": 3.0, "deadband": 1.0}
ER_LIMIT = {"quantity": "er_db", "alarm": 20.0, "warning": 23.0} | DELAYS
ANGLE_LIMIT = {"quantity": "angle_deg", "alarm": 12.0, "warning": 8.0} | DELAYS
#: (raised, alarm since, returned, level), seconds from the start. The dip of 2 s is shorter than the delay of 3 s; the
#: second excursion is a warning from 21.1 s on and rises 3 s after it went below the alarm limit at 26.1 s.
EPISODES = ((13.1, 13.1, 19.1, "alarm"), (24.1, 29.1, 34.1, "alarm"))
DOP = 0.97


@dataclass(frozen=True, slots=True)
class Course:
    """Samples of one tap: microseconds from the start, and raw columns."""

    after_us: IntArray
    columns: dict[str, FloatArray]

    def __len__(self) -> int:
        return len(self.after_us)


def _er_db(generator: np.random.Generator, segments: Segments, step_us: int) -> tuple[IntArray, FloatArray]:
    duration_s = sum(seconds for _, seconds in segments)
    after_us = np.arange(0, duration_s * 1_000_000, step_us) + min(OFFSET_US, step_us // 2)
    by_second = np.repeat([er_db for er_db, _ in segments], [seconds for _, seconds in segments])
    return after_us, by_second[after_us // 1_000_000] + generator.normal(0.0, 0.05, len(after_us))


def two_port_course(seed: int, segments: Segments = SEGMENTS, step_us: int = STEP_US) -> Course:
    """Port powers, mW, of the course, with a little noise."""
    generator = np.random.default_rng(seed)
    after_us, er_db = _er_db(generator, segments, step_us)
    port1 = 0.998 * (1.0 + generator.normal(0.0, 1e-3, len(er_db)))
    temperature_c = 21.0 + generator.normal(0.0, 0.01, len(er_db))
    return Course(after_us, {"port1": port1, "port2": port1 * 10.0 ** (-er_db / 10.0), "temperature_c": temperature_c})


def stokes_course(seed: int, segments: Segments = SEGMENTS, step_us: int = STEP_US) -> Course:
    """Stokes parameters, uW, as far from (1, 0, 0) as the two-port light's leak says."""
    generator = np.random.default_rng(seed)
    after_us, er_db = _er_db(generator, segments, step_us)
    gamma_rad = 2.0 * np.arctan(10.0 ** (-er_db / 20.0))
    around_rad = generator.uniform(0.0, 2.0 * np.pi, len(er_db))
    s0 = 250.0 * (1.0 + generator.normal(0.0, 1e-3, len(er_db)))
    polarized = DOP * s0
    across = polarized * np.sin(gamma_rad)
    return Course(after_us, {"s0": s0, "s1": polarized * np.cos(gamma_rad), "s2": across * np.cos(around_rad),
                             "s3": across * np.sin(around_rad)})
