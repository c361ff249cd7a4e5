"""Made records of a level."""

import numpy as np


def walk(rng: np.random.Generator, at_s: np.ndarray, drift: float, spread: float, start: float = 5.0) -> np.ndarray:
    """A drifted walk, exact at any spacing."""
    gap_s = np.diff(at_s)
    return start + np.concatenate([[0.0], np.cumsum(drift * gap_s + spread * np.sqrt(gap_s) * rng.standard_normal(len(gap_s)))])


def reverting(rng: np.random.Generator, at_s: np.ndarray, rate: float, mean: float, sd: float) -> np.ndarray:
    """An Ornstein–Uhlenbeck record, exact at any spacing, begun at rest."""
    level = np.empty(len(at_s))
    level[0] = mean + sd * rng.standard_normal()
    for number, gap_s in enumerate(np.diff(at_s), start=1):
        kept = np.exp(-rate * gap_s)
        level[number] = mean + kept * (level[number - 1] - mean) + sd * np.sqrt(1.0 - kept**2) * rng.standard_normal()
    return level
