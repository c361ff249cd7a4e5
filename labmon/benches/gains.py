"""The gain ratio of two ports from one exchange of the polarizations: two stretches, the light turned by 90° in between."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.models import Calibration
from analysis.reduce.gain import gain_ratio_from_exchange
from analysis.reduce.zero import mean_error
from ingest.models import Tap
from labmon.benches.calibration import set_calibration
from labmon.benches.exposures import sound_pair
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


def gain_taking(tap: Tap, straight: Stretch, exchanged: Stretch, *, now_us: int | None = None) -> GainTaking:
    """The gain ratio from a stretch with the light in one port and one with it in the other; nothing is written.

    Raises:
        WriteError: The tap has no two ports, too few readings came, or the light was not exchanged.
    """
    pair = sound_pair(tap, straight, exchanged, now_us=now_us)
    nets = [net for one in pair for net in (one.first, one.second)]
    means = [float(net.mean()) for net in nets]
    if not all(mean > 0.0 for mean in means):
        raise WriteError("stretch", "A port reads nothing above its zero.", "Use light that both ports see in both positions.")
    relative = np.array([mean_error(net) / net.mean() for net in nets])
    found = gain_ratio_from_exchange(*means, relative_sigma=relative)
    er_db = float(found.er_db) if pair[0].brighter == 1 else -float(found.er_db)
    before = pair[0].version
    return GainTaking(float(found.gain_ratio), float(found.gain_ratio_sigma), er_db, float(found.er_sigma_db),
                      before.gain_ratio if before else 1.0)


def enter_gain(tap: Tap, straight: Stretch, exchanged: Stretch, *, by: Person, now_us: int | None = None) -> Calibration:
    """A new version with the gain of the exchange, made anew from the raw readings; it holds from the earlier stretch on.

    Raises:
        WriteError: As `gain_taking`.
    """
    taking = gain_taking(tap, straight, exchanged, now_us=now_us)
    changes: dict[str, Any] = {"gain_ratio": taking.gain_ratio}
    reason = f"gain from an exchange of the polarizations, {taking.gain_ratio:.5g} ± {taking.sigma:.2g}"
    return set_calibration(tap, min(straight.from_at, exchanged.from_at), changes, by=by, reason=reason)
