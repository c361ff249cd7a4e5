"""The highest extinction ratio that a tap can honestly claim now, from its zero's error, its floor and its newest light."""

from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.models import Calibration
from analysis.quantities import linear_from_raw
from analysis.reduce.ceiling import CeilingCause, joint_er_ceiling
from ingest.models import Tap, TapKind
from ingest.store.columns import Readings

READINGS_LOOKED_AT: Final = 60


@dataclass(frozen=True, slots=True)
class TapCeiling:
    """``er_db`` and what limits it most, None where it cannot be told; ``missing`` names what nobody has entered."""

    er_db: float | None
    worst: CeilingCause | None
    missing: tuple[str, ...]


def ceiling_of(tap: Tap, version: Calibration | None, readings: Readings) -> TapCeiling | None:
    """The ceiling of a two-port or dark-port tap by its newest readings; None for other kinds, or without light."""
    if tap.kind not in (TapKind.TWO_PORT, TapKind.DARK_PORT):
        return None
    if version is None:
        return TapCeiling(None, None, ("zero", "floor"))
    bright, dark_port = _bright(tap, version, readings)
    if not np.isfinite(bright) or bright <= 0.0:
        return None
    scale = version.gain_ratio if dark_port == 2 else 1.0
    zero_error, floor = getattr(version, f"zero{dark_port}_error"), getattr(version, f"floor{dark_port}")
    is_leakage_known = version.leakage is None or version.leakage_sigma is not None
    missing = tuple(name for name, is_there in (("error of the zero", zero_error is not None), ("floor", floor > 0.0),
                                                ("uncertainty of the leakage", is_leakage_known)) if not is_there)
    if floor <= 0.0 and zero_error is None:
        return TapCeiling(None, None, missing)
    ceiling = joint_er_ceiling(bright, zero_sigma=scale * (zero_error or 0.0), noise_sigma=scale * floor,
                               leakage=version.leakage, leakage_sigma=version.leakage_sigma, wanted_port=3 - dark_port)
    return TapCeiling(ceiling.er_db if np.isfinite(ceiling.er_db) else None, ceiling.worst, missing)


def _bright(tap: Tap, version: Calibration, readings: Readings) -> tuple[float, int]:
    """Net light of the wanted port, on port 1's scale, and which port is the dark one."""
    recent = readings.pick(slice(-READINGS_LOOKED_AT, None))
    if tap.kind == TapKind.DARK_PORT:
        monitor = linear_from_raw(recent.column("monitor"), tap.unit) - version.zero1
        if version.monitor_ratio is not None and np.isfinite(monitor).any():
            return float(np.nanmedian(monitor)) * version.monitor_ratio, 2
        return version.bright_nominal or np.nan, 2
    raw = linear_from_raw(recent.column(f"port{version.wanted_port}"), tap.unit)
    if not np.isfinite(raw).any():
        return np.nan, 3 - version.wanted_port
    net = float(np.nanmedian(raw)) - getattr(version, f"zero{version.wanted_port}")
    return net * (version.gain_ratio if version.wanted_port == 2 else 1.0), 3 - version.wanted_port
