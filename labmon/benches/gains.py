"""The gain ratio of two ports from one exchange of the polarizations: two stretches, the light turned by 90° in between."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.models import Calibration
from analysis.quantities import FloatArray, linear_from_raw
from analysis.record.calibrations import version_at
from analysis.reduce.gain import gain_ratio_from_exchange
from analysis.reduce.zero import LEAST_READINGS, mean_error
from ingest.models import Tap, TapKind
from ingest.store.read import read_readings
from ingest.times import us_of
from labmon.benches.calibration import set_calibration
from labmon.benches.zeros import Stretch
from labmon.errors import WriteError
from labmon.people.models import Person


@dataclass(frozen=True, slots=True)
class GainTaking:
    """What an exchange gives: gain of port 1 over port 2 and the ER free of it, each with 1 sigma; the gain of before."""

    gain_ratio: float
    sigma: float
    er_db: float
    er_sigma_db: float
    before: float


def gain_taking(tap: Tap, straight: Stretch, exchanged: Stretch) -> GainTaking:
    """The gain ratio from a stretch with the light in one port and one with it in the other; nothing is written.

    Raises:
        WriteError: The tap has no two ports, too few readings came, or the light was not exchanged.
    """
    if tap.kind != TapKind.TWO_PORT:
        raise WriteError("tap", f"A {tap.kind} tap has no gain of two ports.", "Choose a two-port tap.")
    one, two = _nets(tap, straight), _nets(tap, exchanged)
    first, second = [float(net.mean()) for net in one], [float(net.mean()) for net in two]
    if not all(value > 0.0 for value in (*first, *second)):
        raise WriteError("stretch", "A port reads nothing above its zero.", "Use light that both ports see in both positions.")
    if (first[0] > first[1]) == (second[0] > second[1]):
        raise WriteError("stretch", "The same port is the brighter one in both stretches: the light was not exchanged.",
                         "Turn the light by 90° between them, for instance with a half-wave plate by 45°.")
    relative = np.array([mean_error(net) / net.mean() for net in (*one, *two)])
    found = gain_ratio_from_exchange(*first, *second, relative_sigma=relative)
    before = version_at(tap.pk, straight.from_at)
    er_db = float(found.er_db) if first[0] > first[1] else -float(found.er_db)
    return GainTaking(float(found.gain_ratio), float(found.gain_ratio_sigma), er_db, float(found.er_sigma_db),
                      before.gain_ratio if before else 1.0)


def enter_gain(tap: Tap, straight: Stretch, exchanged: Stretch, *, by: Person) -> Calibration:
    """A new version with the gain of the exchange, made anew from the raw readings; it holds from the earlier stretch on.

    Raises:
        WriteError: As `gain_taking`.
    """
    taking = gain_taking(tap, straight, exchanged)
    changes: dict[str, Any] = {"gain_ratio": taking.gain_ratio}
    reason = f"gain from an exchange of the polarizations, {taking.gain_ratio:.5g} ± {taking.sigma:.2g}"
    return set_calibration(tap, min(straight.from_at, exchanged.from_at), changes, by=by, reason=reason)


def _nets(tap: Tap, stretch: Stretch) -> tuple[FloatArray, FloatArray]:
    """Both ports behind their zeros in a stretch."""
    readings = read_readings(tap.pk, us_of(stretch.from_at), us_of(stretch.until_at), columns=("port1", "port2"))
    version = version_at(tap.pk, stretch.from_at)
    zeros = (version.zero1, version.zero2) if version else (0.0, 0.0)
    raw = [linear_from_raw(readings.column(name), tap.unit) for name in ("port1", "port2")]
    both = np.isfinite(raw[0]) & np.isfinite(raw[1])
    if both.sum() < LEAST_READINGS:
        raise WriteError("stretch", f"Only {int(both.sum())} readings lie in a stretch.",
                         f"Give one with at least {LEAST_READINGS}.")
    return raw[0][both] - zeros[0], raw[1][both] - zeros[1]
