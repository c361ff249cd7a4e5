"""The leakage of a tap's splitter from two exposures: light meant for port 1, then light meant for port 2."""

from dataclasses import dataclass
from typing import Any

from analysis.models import Calibration
from analysis.reduce.ceiling import er_ceiling_db_from_leakage, er_ceiling_db_from_leakage_error
from analysis.reduce.leakage_exposures import Leakage, SeenShare, leakage_from_exposures, seen_share
from ingest.models import Tap
from labmon.benches.calibration import set_calibration
from labmon.benches.exposures import Exposure, sound_pair
from labmon.benches.zeros import Stretch
from labmon.errors import WriteError
from labmon.people.models import Person


@dataclass(frozen=True, slots=True)
class LeakageTaking:
    """What two exposures give, and what it means for the wanted port.

    ``ceiling_left_db`` is the highest ER that can be shown while the leakage is not taken off, ``ceiling_off_db`` what its
    uncertainty leaves once it is.
    """

    leakage: Leakage
    wanted_port: int
    ceiling_left_db: float
    ceiling_off_db: float
    before: Calibration | None


def leakage_taking(tap: Tap, first: Stretch, second: Stretch, *, light_er_db: float | None = None,
                   now_us: int | None = None) -> LeakageTaking:
    """The leakage from two exposures, in whichever order; nothing is written.

    Args:
        light_er_db: Least extinction ratio of the light used, dB; None: taken for pure.
    Raises:
        WriteError: The tap has no two ports, an exposure is not sound, or the light was not exchanged.
    """
    pair = sorted(sound_pair(tap, first, second, now_us=now_us), key=lambda one: one.brighter)
    try:
        found = leakage_from_exposures(_share(pair[0]), _share(pair[1]), light_er_db=light_er_db)
    except ValueError as fault:
        raise WriteError("light_er_db", f"{fault}", "Give what the polarizer's paper says, or leave it empty.") from fault
    version = pair[0].version
    wanted = version.wanted_port if version else 1
    return LeakageTaking(found, wanted, er_ceiling_db_from_leakage(found.matrix, wanted_port=wanted),
                         er_ceiling_db_from_leakage_error(found.matrix, found.sigma, wanted_port=wanted), version)


def enter_leakage(tap: Tap, first: Stretch, second: Stretch, *, by: Person, light_er_db: float | None = None,
                  now_us: int | None = None) -> Calibration:
    """A new version with the leakage and its uncertainty, made anew from the raw readings; it holds from the earlier stretch.

    Raises:
        WriteError: As `leakage_taking`.
    """
    found = leakage_taking(tap, first, second, light_er_db=light_er_db, now_us=now_us).leakage
    changes: dict[str, Any] = {"leakage": found.matrix.tolist(), "leakage_sigma": found.sigma.tolist()}
    light = f"light of {light_er_db:g} dB at least" if light_er_db is not None else "light taken for pure"
    reason = (f"leakage from two exposures, {light}: {found.matrix[1, 0]:.3g} ± {found.sigma[1, 0]:.1g} into port 2, "
              f"{found.matrix[0, 1]:.3g} ± {found.sigma[0, 1]:.1g} into port 1")
    return set_calibration(tap, min(first.from_at, second.from_at), changes, by=by, reason=reason)


def _share(one: Exposure) -> SeenShare:
    """The share in the wrong port, both nets on port 1's scale."""
    gain = one.version.gain_ratio if one.version else 1.0
    sigmas = (0.0, 0.0) if one.version is None else (one.version.zero1_error or 0.0, gain * (one.version.zero2_error or 0.0))
    first, second = one.first, gain * one.second
    if one.brighter == 1:
        return seen_share(first, second, bright_zero_sigma=sigmas[0], dark_zero_sigma=sigmas[1])
    return seen_share(second, first, bright_zero_sigma=sigmas[1], dark_zero_sigma=sigmas[0])
