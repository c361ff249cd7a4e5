"""Stokes taps: polarimeter readings to the state of polarization, its angle and extinction ratio on the wanted axis."""

from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import (
    BoolArray,
    FloatArray,
    linear_from_raw,
    sop_from_angles,
    watts_per_unit,
)
from analysis.reduce.calibration import IEEE, TapCalibration
from analysis.reduce.extinction import extinction
from analysis.reduce.trust import Reason, ReasonArray, marked

Columns = Mapping[str, FloatArray]
DOP_ROUNDING: Final = 1e-6  # float32 readings of fully polarized light pass 1 by this much
POLE_ROUNDING: Final = 1e-12
SAMPLES_AT_ONCE: Final = 16_384  # what one pass touches then stays in the processor's cache


def reduce_stokes(columns: Columns, unit: str, cal: TapCalibration) -> tuple[dict[str, Any], dict[Quantity, ReasonArray]]:
    """Quantities of polarimeter readings.

    Args:
        columns: ``s0 s1 s2 s3`` (powers in ``unit``), or ``azimuth_deg ellipticity_deg`` with optional ``dop`` (ratio)
            and ``power``, shape (N,). The floors of the calibration are 1 sigma of the wanted and the other port.
    Returns:
        Fields of `Reduced`, and reasons per quantity. Azimuth rad in (-pi/2, pi/2], NaN at the poles; ellipticity rad
        in [-pi/4, pi/4]; ``dop`` may exceed 1 (doubtful, never refused), NaN where S0 is not above 0. ER and angle are
        NaN without a wanted state. Source: docs/formulas.md, F-02 to F-04, F-11 to F-13.
    """
    count = len(next(iter(columns.values())))
    if count <= SAMPLES_AT_ONCE:
        return _reduce_run(columns, unit, cal)
    fields: dict[str, Any] = {}
    reasons: dict[Quantity, ReasonArray] = {}
    for start in range(0, count, SAMPLES_AT_ONCE):
        run = slice(start, start + SAMPLES_AT_ONCE)
        found, why = _reduce_run({name: column[run] for name, column in columns.items()}, unit, cal.part(run))
        for whole, parts in ((fields, found), (reasons, why)):
            for name, part in parts.items():
                if name not in whole:
                    whole[name] = np.empty((count, *part.shape[1:]), dtype=part.dtype)
                whole[name][run] = part
    return fields, reasons


def dop_and_sop(s0: FloatArray, s1: FloatArray, s2: FloatArray, s3: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Degree of polarization and unit Stokes vectors alone, for long records; no marks, no angles, no ER.

    Args:
        s0, s1, s2, s3: One unit, shape (N,), naming of handedness as wanted in the result.
    Returns:
        DOP |S|/S0, shape (N,), not clipped, NaN where S0 is not above 0; and S/|S|, shape (N, 3), NaN for a zero vector
        and beside a NaN. Source: docs/formulas.md, F-11.
    """
    count = len(s0)
    dop, sop = np.empty(count), np.empty((count, 3))
    for start in range(0, count, SAMPLES_AT_ONCE):
        run = slice(start, start + SAMPLES_AT_ONCE)
        total, parts = s0[run], (s1[run], s2[run], s3[run])
        length = _length(*parts)
        np.divide(length, total, out=dop[run], where=total > 0.0)
        dop[run][~(total > 0.0)] = np.nan
        length[length == 0.0] = np.nan
        for axis, part in enumerate(parts):
            np.divide(part, length, out=sop[run, axis])
    return dop, sop


def _length(s1: FloatArray, s2: FloatArray, s3: FloatArray) -> FloatArray:
    """|S| of a run, shape (n,)."""
    length = s1 * s1
    length += s2 * s2
    length += s3 * s3
    return np.sqrt(length, out=length)


def _reduce_run(columns: Columns, unit: str, cal: TapCalibration) -> tuple[dict[str, Any], dict[Quantity, ReasonArray]]:
    """`reduce_stokes` of a run of samples that fits into the cache."""
    total, vector, dop = _from_stokes(columns, unit) if "s0" in columns else _from_angles(columns, unit)
    _turn_to_optics(vector, cal.handedness)
    length = _length(*vector.T)
    length[length == 0.0] = np.nan
    sop = vector / length[:, None]
    azimuth_rad, ellipticity_rad = _angles_of(sop)
    count = len(dop)
    clipped = columns.get("clipped")
    is_saturated = np.zeros(count, dtype=bool) if clipped is None else np.nan_to_num(clipped) > 0.0
    if cal.saturation1 is not None and "s0" in columns:
        is_saturated = is_saturated | (total >= cal.saturation1)
    lost = ~(np.isfinite(vector[:, 0]) & np.isfinite(vector[:, 1]) & np.isfinite(vector[:, 2]))
    shared = marked(count, (is_saturated, Reason.SATURATED), (lost, Reason.IMPOSSIBLE))
    odd_dop = marked(count, (dop > 1.0 + DOP_ROUNDING, Reason.DOP_ABOVE_ONE))
    scale_w = watts_per_unit(unit or "V")
    fields: dict[str, Any] = {
        "power_w": total * scale_w,
        "dop": dop,
        "sop": sop,
        "azimuth_rad": azimuth_rad,
        "ellipticity_rad": ellipticity_rad,
    }
    no_dop = marked(count, (np.isnan(dop) & ~lost, Reason.NEGATIVE if "s0" in columns else Reason.NO_DOP))
    no_power = marked(
        count, (np.full(count, np.isnan(scale_w)), Reason.NO_POWER_UNIT), (~np.isfinite(total) & ~lost, Reason.UNDEFINED)
    )
    reasons = {Quantity.DOP: shared | odd_dop | no_dop, Quantity.POWER_W: shared | no_power}
    on_axis, axis_reasons = _on_wanted_axis(total, sop, dop, cal)
    reasons |= {quantity: axis_reasons[quantity] | shared | odd_dop for quantity in axis_reasons}
    reasons[Quantity.ER_DB] |= no_dop
    return fields | on_axis, reasons


def _from_stokes(columns: Columns, unit: str) -> tuple[FloatArray, FloatArray, FloatArray]:
    """S0, the vector (S1, S2, S3) and DOP; dBm has no meaning for signed Stokes values, so they are taken as linear."""
    total = np.asarray(columns["s0"], dtype=np.float64)
    vector = np.stack([columns["s1"], columns["s2"], columns["s3"]], axis=-1).astype(np.float64)
    return total, vector, _length(*vector.T) / np.where(total > 0.0, total, np.nan)


def _from_angles(columns: Columns, unit: str) -> tuple[FloatArray, FloatArray, FloatArray]:
    ellipticity_rad = np.radians(np.asarray(columns["ellipticity_deg"], dtype=np.float64))
    azimuth_rad = np.radians(np.asarray(columns["azimuth_deg"], dtype=np.float64))
    at_pole = np.abs(ellipticity_rad) >= np.pi / 4 - POLE_ROUNDING
    vector = sop_from_angles(np.where(at_pole & np.isnan(azimuth_rad), 0.0, azimuth_rad), ellipticity_rad)
    nothing = np.full(len(vector), np.nan)
    dop = np.asarray(columns["dop"], dtype=np.float64) if "dop" in columns else nothing
    power = linear_from_raw(columns["power"], unit) if "power" in columns else nothing
    return power, vector, dop


def _turn_to_optics(vector: FloatArray, handedness: Any) -> None:
    """Flip S3 in place where the instrument counts circular light the other way; F-12."""
    if isinstance(handedness, str):
        if handedness == IEEE:
            vector[:, 2] *= -1.0
    else:
        vector[np.asarray(handedness) == IEEE, 2] *= -1.0


def _angles_of(sop: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Azimuth and ellipticity of unit vectors, rad; F-11."""
    equator = np.hypot(sop[:, 0], sop[:, 1])
    azimuth_rad = 0.5 * np.arctan2(sop[:, 1], sop[:, 0])
    azimuth_rad[azimuth_rad == -np.pi / 2] = np.pi / 2
    azimuth_rad[~(equator > POLE_ROUNDING)] = np.nan
    return azimuth_rad, 0.5 * np.arctan2(sop[:, 2], equator)


def _on_wanted_axis(
    total: FloatArray, sop: FloatArray, dop: FloatArray, cal: TapCalibration
) -> tuple[dict[str, Any], dict[Quantity, ReasonArray]]:
    """Port powers (for a total of 1 where no power was sent), ER and angle on the axis of the wanted state; F-13."""
    count = len(sop)
    if cal.wanted_state is None:
        unset = np.full(count, np.uint32(Reason.NO_WANTED_STATE))
        return {}, {Quantity.ER_DB: unset, Quantity.ANGLE_DEG: unset.copy()}
    state = np.atleast_2d(np.asarray(cal.wanted_state, dtype=np.float64))
    state_length = np.linalg.norm(state, axis=-1)
    is_unset = np.broadcast_to(~(state_length > 0.0), count)
    axis = state / np.where(state_length > 0.0, state_length, np.nan)[:, None]
    cosine = axis[:, 0] * sop[:, 0] + axis[:, 1] * sop[:, 1] + axis[:, 2] * sop[:, 2]
    scale = np.where(np.isfinite(total), total, 1.0)
    share = np.where(dop == 0.0, 0.0, dop * cosine)
    wanted, other = 0.5 * scale * (1.0 + share), 0.5 * scale * (1.0 - share)
    ratio = extinction(wanted, other, np.asarray(cal.floor1, dtype=np.float64), np.asarray(cal.floor2, dtype=np.float64))
    near, far = _length(*(axis - sop).T), _length(*(axis + sop).T)
    angle_rad = 2.0 * np.arctan2(near, far)  # F-03 for unit vectors: exact at both ends
    unset = marked(count, (is_unset, Reason.NO_WANTED_STATE))
    er_reasons = np.where(is_unset, unset, ratio.reasons)
    fields = {
        "wanted_power": wanted,
        "other_power": other,
        "er_db": ratio.er_db,
        "er_sigma_db": ratio.er_sigma_db,
        "is_lower_bound": ratio.is_lower_bound,
        "is_upper_bound": ratio.is_upper_bound,
        "angle_rad": angle_rad,
        "polarized_er_db": _polarized_er_db(near, far),
    }
    undefined_angle: BoolArray = np.isnan(angle_rad) & ~is_unset
    return fields, {Quantity.ER_DB: er_reasons, Quantity.ANGLE_DEG: unset | marked(count, (undefined_angle, Reason.UNDEFINED))}


def _polarized_er_db(near: FloatArray, far: FloatArray) -> FloatArray:
    """ER of the polarized part alone, dB, from the distances to the wanted state and to its opposite: 20 log10 cot(angle/2).

    NaN where exactly on the axis or opposite to it.
    """
    is_between = (near > 0.0) & (far > 0.0)
    return 20.0 * np.log10(np.where(is_between, far, np.nan) / np.where(is_between, near, 1.0))
