"""What the instruments of a bench read: raw columns as a station sends them."""

import numpy as np
from numpy.typing import NDArray

from analysis.fibre.detector import Detector, split_powers
from labmon.demo.benches import BenchPlan, Polarimeter, Ports
from labmon.demo.faults import HandednessFlipped, HumAlias, Ledger, PortFrozen, RoomLight
from labmon.demo.seeds import white_per_second

FloatArray = NDArray[np.float64]
Columns = dict[str, FloatArray]


def read_ports(bench: BenchPlan, head: Ports, total_w: FloatArray, leak: FloatArray, at_s: FloatArray,
               temperature_c: FloatArray, zeroed_c: float, ledger: Ledger, seed: int) -> Columns:
    """Two-port readings.

    Args:
        total_w: Power before the splitter, W, shape (N,).
        leak: Share of it in the unwanted state, shape (N,).
        at_s: Times, s since day 1, shape (N,).
        temperature_c: Of the detectors, °C, shape (N,).
        zeroed_c: Temperature at which the plan's zeros hold, °C.
    Returns:
        ``port1``, ``port2`` and, where the station tells it, ``port2_min`` and ``port2_max``, each shape (N,).
    """
    light1_w, light2_w = split_powers(total_w, leak, np.array(head.leakage))
    for lamps in ledger.of(RoomLight, bench.name):
        added_w = np.where(lamps.lasts(at_s), lamps.added_w, 0.0)
        light1_w, light2_w = light1_w + added_w, light2_w + added_w
    light2_w = light2_w * _hum(bench.name, 2, at_s, ledger)
    one = Detector(units_per_w=head.units_per_w, zero=head.zero1, zero_reference_c=zeroed_c,
                   noise=head.noise1, top=head.top, step=head.step)
    two = Detector(units_per_w=head.units_per_w / head.gain_ratio, zero=head.zero2, zero_reference_c=zeroed_c,
                   noise=head.noise2, top=head.top, step=head.step)
    columns = {"port1": one.read(light1_w, temperature_c, white_per_second(seed, f"{bench.name} port1", at_s)),
               "port2": two.read(light2_w, temperature_c, white_per_second(seed, f"{bench.name} port2", at_s))}
    for frozen in ledger.of(PortFrozen, bench.name):
        _freeze(columns[f"port{frozen.port}"], frozen, at_s)
    if head.has_spread:
        spread = head.noise2 * (1.5 + 0.5 * np.abs(white_per_second(seed, f"{bench.name} spread", at_s)))
        columns["port2_min"] = columns["port2"] - spread
        columns["port2_max"] = np.minimum(columns["port2"] + spread, head.top)
    return columns


def read_stokes(bench: BenchPlan, head: Polarimeter, total_w: FloatArray, sop: FloatArray, at_s: FloatArray,
                ledger: Ledger, seed: int) -> Columns:
    """Stokes readings ``s0 s1 s2 s3``, each shape (N,), of unit Stokes vectors ``sop``, shape (N, 3)."""
    power = head.units_per_w * total_w
    noise = [head.noise * white_per_second(seed, f"{bench.name} s{part}", at_s) for part in range(4)]
    columns = {"s0": power * (1.0 + 0.2 * noise[0])}
    for part in (1, 2, 3):
        columns[f"s{part}"] = power * (head.dop * sop[:, part - 1] + noise[part])
    for flip in ledger.of(HandednessFlipped, bench.name):
        columns["s3"] = np.where(flip.lasts(at_s), -columns["s3"], columns["s3"])
    return columns


def _hum(bench: str, port: int, at_s: FloatArray, ledger: Ledger) -> FloatArray:
    """Factor of an aliased mains line whose period wanders by 4 % with the mains, shape (N,)."""
    factor = np.ones(len(at_s))
    for hum in ledger.of(HumAlias, bench):
        if hum.port == port:
            phase = 2.0 * np.pi * at_s / hum.period_s + 1.0 * np.sin(2.0 * np.pi * at_s / 700.0)
            factor = np.where(hum.lasts(at_s), factor * (1.0 + hum.share * np.sin(phase)), factor)
    return factor


def _freeze(values: FloatArray, frozen: PortFrozen, at_s: FloatArray) -> None:
    """Hold the value of the fault's first reading, in place.

    In a piece of the time axis that begins within the fault the held value is that piece's first reading.
    """
    held = np.flatnonzero(frozen.lasts(at_s))
    if held.size:
        values[held] = values[held[0]]
