"""An invented lab: benches that cycle with the room, follow the day, walk and are touched; realigned each morning.

Everything here is made up; it shows which rule of clearance would have done better there, no more.
"""

import numpy as np

from analysis.outlook.window import PastWindow
from tests.analysis.outlook.nights import DAY_US

STEP_S = 600
PER_DAY = 144


def bench_sop(rng: np.random.Generator, days: int, limit_rad: float) -> np.ndarray:
    """States at 10-minute steps from midnight of day 0 on, shape (144 days, 3); the wanted state is (1, 0, 0)."""
    hours = np.arange(days * PER_DAY) / 6.0
    cycle = rng.uniform(0.5, 4.0) * (np.sin(2 * np.pi * hours / rng.uniform(0.4, 1.5)) + 0.3 * rng.normal(size=len(hours)))
    daily = rng.uniform(0.5, 5.0) * np.sin(2 * np.pi * hours / 24.0 + rng.uniform(0, 6))
    axes = rng.normal(size=(2, 2))
    axes /= np.linalg.norm(axes, axis=1, keepdims=True)
    walk = np.cumsum(rng.normal(size=(len(hours), 2)), axis=0) * 10 ** rng.uniform(-1.3, 0.1) * np.sqrt(1 / 6)
    at_work = np.where((hours % 24 > 9) & (hours % 24 < 19), 0.02, 0.0005) * 0.5
    touches = np.cumsum((rng.random(len(hours)) < at_work)[:, None] * rng.normal(size=(len(hours), 2)) * 6.0, axis=0)
    plane = np.radians(np.outer(cycle, axes[0]) + np.outer(daily, axes[1]) + walk + touches)
    for morning in range(60, len(hours), PER_DAY):              # 10:00: back to the wanted state if half the limit is used
        if np.linalg.norm(plane[morning]) > limit_rad / 2.0:
            plane[morning:] -= plane[morning]
    angle = np.linalg.norm(plane, axis=1, keepdims=True)
    return np.hstack([np.cos(angle), np.sinc(angle / np.pi) * plane])


def nights(sop: np.ndarray, state: np.ndarray) -> list[PastWindow]:
    """Windows 20:00 to 08:00 of every day but the last, with ``state`` as what was seen."""
    return [PastWindow(start_us=day * DAY_US + 72_000_000_000, length_s=43_200.0, start_hour=20.0, is_working_day=True,
                       at_us=day * DAY_US + 72_000_000_000 + np.arange(72) * STEP_S * 1_000_000,
                       state=state[day * PER_DAY + 120:day * PER_DAY + 192], is_trusted=np.ones(72, bool))
            for day in range(len(sop) // PER_DAY - 1)]
