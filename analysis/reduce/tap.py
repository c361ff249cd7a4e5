"""One call that reduces readings of any tap kind, of one tap or of many taps concatenated."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import BoolArray, FloatArray, IntArray
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.ports import reduce_dark_port, reduce_two_port
from analysis.reduce.sample import Reduced, empty_fields
from analysis.reduce.stokes import reduce_stokes
from analysis.reduce.trust import Reason, ReasonArray, trust_of

TWO_PORT, DARK_PORT, STOKES, CLIMATE = "two-port", "dark-port", "stokes", "climate"
_REDUCERS = {TWO_PORT: reduce_two_port, DARK_PORT: reduce_dark_port, STOKES: reduce_stokes}
_MIX = (1.0, 2.0**0.5, 3.0**0.5)  # no usual change of one Stokes reading hides that of another
_AIR = ("temperature_c", "humidity_pct", "pressure_hpa")


@dataclass(frozen=True, slots=True, kw_only=True)
class TrustContext:
    """What only the caller knows of the samples' trust.

    Attributes:
        marks: Reasons that hold for all quantities, shape (N,) or one mask (clocks, two devices, old zero, hum).
        is_flat: Frozen channels, shape (N, C), as `analysis.reduce.flat.mark_flat` gives them: (port1 or monitor,
            port2), or one column for Stokes taps.
    """

    marks: ReasonArray | int = 0
    is_flat: BoolArray | None = None


def reduce_tap(
    kind: str,
    unit: str,
    at_us: IntArray,
    columns: Mapping[str, FloatArray],
    cal: TapCalibration,
    *,
    trust_context: TrustContext | None = None,
) -> Reduced:
    """Reduce N readings of taps of one kind and unit.

    Args:
        kind: "two-port", "dark-port", "stokes" or "climate".
        unit: Of the raw powers: W, mW, uW, dBm, V, count (any for climate).
        at_us: Data time, shape (N,).
        columns: Raw columns as sent, each float64 (N,), NaN where absent.
        cal: One value, or one per sample, for each field.
    Raises:
        ValueError: The kind or unit is unknown, or a column that the kind needs is missing.
    """
    fields = empty_fields(at_us)
    for name in _AIR:
        if name in columns:
            fields[name] = np.asarray(columns[name], dtype=np.float64)
    if kind == CLIMATE:
        return Reduced(**fields)
    if kind not in _REDUCERS:
        raise ValueError(f"kind={kind!r} is unknown; use one of {', '.join(_REDUCERS)} or {CLIMATE}.")
    try:
        quantities, reasons = _REDUCERS[kind](columns, unit, cal)
    except KeyError as missing:
        raise ValueError(f"a {kind} tap needs column {missing}; it has {', '.join(columns)}.") from None
    fields |= quantities
    context = trust_context or TrustContext()
    if context.is_flat is not None:
        _mark_flat_quantities(kind, context.is_flat, quantities, cal, reasons)
    for quantity, mask in reasons.items():
        if not (isinstance(context.marks, int) and context.marks == 0):
            mask = mask | np.asarray(context.marks, dtype=np.uint32)
        fields["reasons"][quantity] = mask
        fields["trust"][quantity] = trust_of(mask)
    return Reduced(**fields)


def flat_channels(kind: str, columns: Mapping[str, FloatArray]) -> FloatArray:
    """The raw channels that `analysis.reduce.flat.mark_flat` watches, shape (N, C).

    (port1, port2); (monitor, port2) with NaN where there is no monitor; for Stokes taps one number that changes with
    any of the three readings; for climate taps none (C = 0).
    """
    if kind == TWO_PORT:
        return np.stack([columns["port1"], columns["port2"]], axis=-1)
    if kind == DARK_PORT:
        dark = columns["port2"]
        return np.stack([columns.get("monitor", np.full(len(dark), np.nan)), dark], axis=-1)
    if kind == STOKES:
        names = ("s1", "s2", "s3") if "s0" in columns else ("azimuth_deg", "ellipticity_deg")
        return sum(weight * columns[name] for weight, name in zip(_MIX, names, strict=False))[:, None]
    return np.zeros((len(next(iter(columns.values()), ())), 0))


def _mark_flat_quantities(
    kind: str, is_flat: BoolArray, quantities: dict[str, Any], cal: TapCalibration, reasons: dict[Quantity, ReasonArray]
) -> None:
    """A frozen port spoils ER and angle; power only if it is the brighter port (or the polarimeter as a whole)."""
    any_flat = is_flat.any(axis=-1)
    if not any_flat.any():
        return
    flat = np.uint32(Reason.FLAT)
    for quantity in reasons:
        if quantity is not Quantity.POWER_W:
            reasons[quantity][any_flat] |= flat
    if kind == STOKES:
        bright_flat = any_flat
    else:
        is_second_wanted = np.broadcast_to(np.asarray(cal.wanted_port) == 2, any_flat.shape)
        is_second_brighter = (quantities["wanted_power"] > quantities["other_power"]) == is_second_wanted
        bright_flat = np.where(is_second_brighter, is_flat[:, 1], is_flat[:, 0])
    reasons[Quantity.POWER_W][bright_flat] |= flat
