"""Exposures of a two-port tap to light meant for one of its ports: watched live or named in the past, then compared."""

from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.models import Calibration
from analysis.quantities import BoolArray, FloatArray, linear_from_raw
from analysis.record.calibrations import version_at
from analysis.reduce.zero import LEAST_READINGS, is_steady
from ingest.models import Tap, TapKind
from ingest.store.read import read_readings
from ingest.times import SECOND_US, us_of
from ingest.times import now_us as server_now_us
from labmon.benches.zeros import COME_LATE_S, Stretch, check_stretch, has_newer
from labmon.errors import WriteError


@dataclass(frozen=True, slots=True)
class Exposure:
    """What both ports read in a stretch, behind the zeros that held then.

    Attributes:
        first, second: Nets of port 1 and 2 in the raw linear unit, each on its own scale, shape (N,).
        version: The calibration of then, None before the first.
        is_clipped: A port stood at its saturation.
        is_complete: No more readings are awaited.
    """

    stretch: Stretch
    first: FloatArray
    second: FloatArray
    version: Calibration | None
    is_clipped: bool
    elapsed_s: float
    is_complete: bool

    @property
    def count(self) -> int:
        return len(self.first)

    @property
    def brighter(self) -> int:
        """Which port is the brighter one; 0 where nothing was read."""
        return 0 if not self.count else 1 if self.first.mean() > self.second.mean() else 2

    def fault(self) -> str:
        """Why nothing can be made of it, in words; empty where it is sound."""
        if self.count < LEAST_READINGS:
            return f"only {self.count} readings lie in the stretch"
        if self.is_clipped:
            return "a port stands at its saturation"
        bright, dark = (self.first, self.second) if self.brighter == 1 else (self.second, self.first)
        if not bright.mean() > 0.0:
            return "no port reads anything above its zero"
        if not is_steady(dark / bright.mean() - dark.mean() / bright.mean() ** 2 * bright):
            return "the light's share in the dark port was not steady: something still moved"
        return ""


_WHICH: Final = ("in the first stretch", "in the second stretch")


def exposure(tap: Tap, stretch: Stretch, *, now_us: int | None = None) -> Exposure:
    """What a stretch holds by now; nothing is written.

    Raises:
        WriteError: The tap has no two ports, or the stretch is too short, too long or begins in the future.
    """
    if tap.kind != TapKind.TWO_PORT:
        raise WriteError("tap", f"A {tap.kind} tap has not two ports to compare.", "Choose a two-port tap.")
    clock_us = server_now_us() if now_us is None else now_us
    check_stretch(stretch, clock_us)
    first_us, until_us = us_of(stretch.from_at), us_of(stretch.until_at)
    readings = read_readings(tap.pk, first_us, until_us, columns=("port1", "port2"))
    version = version_at(tap.pk, stretch.from_at)
    zeros = (version.zero1, version.zero2) if version else (0.0, 0.0)
    raw = [linear_from_raw(readings.column(name), tap.unit) for name in ("port1", "port2")]
    both = np.isfinite(raw[0]) & np.isfinite(raw[1])
    return Exposure(
        stretch=stretch,
        first=raw[0][both] - zeros[0],
        second=raw[1][both] - zeros[1],
        version=version,
        is_clipped=_is_clipped(raw, both, version),
        elapsed_s=min(max((clock_us - first_us) / SECOND_US, 0.0), stretch.seconds),
        is_complete=clock_us > until_us + COME_LATE_S * SECOND_US or has_newer(tap, until_us),
    )


def sound_pair(tap: Tap, first: Stretch, second: Stretch, *, now_us: int | None = None) -> tuple[Exposure, Exposure]:
    """Both exposures, complete and sound, with the light exchanged between them.

    Raises:
        WriteError: They are not.
    """
    pair = exposure(tap, first, now_us=now_us), exposure(tap, second, now_us=now_us)
    for found, which in zip(pair, _WHICH, strict=True):
        if not found.is_complete:
            raise WriteError("stretch", f"The stretch is not over yet, {which}.", "Wait until its readings have come.")
        if fault := found.fault():
            raise WriteError("stretch", f"{fault[0].upper()}{fault[1:]}, {which}.", "Hold the light still and take it again.")
    if pair[0].brighter == pair[1].brighter:
        raise WriteError("stretch", "The same port is the brighter one in both stretches: the light was not exchanged.",
                         "Turn the light by 90° between them, for instance with a half-wave plate by 45°.")
    return pair


def _is_clipped(raw: list[FloatArray], both: BoolArray, version: Calibration | None) -> bool:
    tops = (version.saturation1, version.saturation2) if version else (None, None)
    return any(top is not None and bool((port[both] >= top).any()) for port, top in zip(raw, tops, strict=True))
