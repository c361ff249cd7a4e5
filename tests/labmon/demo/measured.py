"""What the demo's raw columns mean: a plain second reduction for the tests, not the program's own."""

import numpy as np

from analysis.fibre.sphere import angle_between_rad
from labmon.demo.benches import BenchPlan, Polarimeter
from labmon.demo.world import wanted_state


def measured_er_db(bench: BenchPlan, columns: dict) -> np.ndarray:
    """10 log10 of the net ports, leakage undone, gain ratio applied."""
    head = bench.head
    nets = np.array([columns["port1"] - head.zero1, (columns["port2"] - head.zero2) * head.gain_ratio])
    wanted, other = np.linalg.inv(np.array(head.leakage)) @ nets
    with np.errstate(divide="ignore", invalid="ignore"):
        return 10.0 * np.log10(wanted / other)


def measured_angle_deg(bench: BenchPlan, columns: dict) -> np.ndarray:
    """Angle on the sphere from the wanted state."""
    sop = np.stack([columns["s1"], columns["s2"], columns["s3"]], axis=-1)
    return np.degrees(angle_between_rad(sop, wanted_state(bench)))


def measured(bench: BenchPlan, columns: dict) -> np.ndarray:
    """The quantity of the bench's limit."""
    is_stokes = isinstance(bench.head, Polarimeter)
    return measured_angle_deg(bench, columns) if is_stokes else measured_er_db(bench, columns)


def is_beyond(bench: BenchPlan, values: np.ndarray, level: float) -> np.ndarray:
    """Where values are on the wrong side of a level."""
    return values > level if bench.limit.quantity == "angle_deg" else values < level
