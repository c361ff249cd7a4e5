"""A tap's calibration as the reducers take it: one version, or one value per sample."""

from collections.abc import Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np

from analysis.quantities import FloatArray, IntArray

OPTICS, IEEE = "optics", "ieee"


@dataclass(frozen=True, slots=True, kw_only=True)
class TapCalibration:
    """Zeros, gain, floors and settings that hold for some samples.

    Every field is one value or an array with one value per sample (first axis N), so that one call reduces samples of
    many taps. ``None`` in a single version and NaN in an array both mean "not set". Zeros, floors (1 sigma of the net
    reading), saturations, monitor and nominal power are in the tap's raw unit, for dBm taps in W. In dark-port taps
    port 1 is the monitor.

    Attributes:
        gain_ratio: Gain of port 1 / gain of port 2. Nets are brought to port 1's scale.
        leakage: readings = leakage @ (power wanted in port 1, power wanted in port 2), shape (2, 2) or (N, 2, 2).
        leakage_sigma: 1 sigma of each entry of ``leakage``, same shape; unset is exact.
        wanted_port: 1 or 2: the port that the wanted light belongs to.
        monitor_ratio: Bright power / monitor power.
        bright_nominal: Declared bright power, used where there is no monitor.
        wanted_state: Wanted (s1, s2, s3) in the optics convention, shape (3,) or (N, 3).
        handedness: "optics" or "ieee": which sense of rotation the instrument calls positive S3.
    """

    zero1: Any = 0.0
    zero2: Any = 0.0
    gain_ratio: Any = 1.0
    floor1: Any = 0.0
    floor2: Any = 0.0
    saturation1: Any = None
    saturation2: Any = None
    leakage: Any = None
    leakage_sigma: Any = None
    wanted_port: Any = 1
    monitor_ratio: Any = None
    bright_nominal: Any = None
    wanted_state: Any = None
    handedness: Any = OPTICS

    def take(self, index: IntArray) -> "TapCalibration":
        """Fields of a stacked calibration (see `stack`) for each sample; ``index`` (N,) names the version of a sample."""
        return TapCalibration(**{name: _taken(getattr(self, name), index) for name in _NAMES})

    def part(self, samples: slice) -> "TapCalibration":
        """The calibration of a run of samples: fields with one value per sample are cut, single ones stay."""
        return TapCalibration(**{name: _cut(name, getattr(self, name), samples) for name in _NAMES})


_NAMES = tuple(field.name for field in fields(TapCalibration))
_SHAPES: dict[str, tuple[int, ...]] = {"leakage": (2, 2), "leakage_sigma": (2, 2), "wanted_state": (3,)}
_WHEN_NONE: dict[str, Any] = {"leakage": np.eye(2), "leakage_sigma": np.zeros((2, 2)), "wanted_state": np.full(3, np.nan)}


def stack(versions: Sequence[TapCalibration]) -> TapCalibration:
    """Several single versions as one, every field of shape (K, ...); a field equal in all of them stays single."""
    if not versions:
        raise ValueError("versions is empty; give one calibration at least.")
    return TapCalibration(**{name: _stacked(name, [getattr(one, name) for one in versions]) for name in _NAMES})


def _stacked(name: str, values: list[Any]) -> Any:
    first = values[0]
    if name not in _SHAPES:
        if all(value == first for value in values):
            return first
        if name == "handedness":
            return np.array(values)
        return np.array([np.nan if value is None else value for value in values], dtype=np.float64)
    if all(value is None for value in values):
        return None
    rows = [_WHEN_NONE[name] if value is None else np.asarray(value, dtype=np.float64) for value in values]
    if any(row.shape != _SHAPES[name] for row in rows):
        raise ValueError(
            f"{name} has shapes {sorted({row.shape for row in rows})}; stack takes single versions of shape {_SHAPES[name]}."
        )
    return np.stack(rows)


def _taken(value: Any, index: IntArray) -> Any:
    return value[index] if isinstance(value, np.ndarray) else value


def _cut(name: str, value: Any, samples: slice) -> Any:
    is_single = value is None or np.ndim(value) <= len(_SHAPES.get(name, ()))
    return value if is_single else np.asarray(value)[samples]


def as_optional(value: Any) -> FloatArray:
    """A field that may be unset, as float array with NaN for unset."""
    return np.asarray(np.nan if value is None else value, dtype=np.float64)
