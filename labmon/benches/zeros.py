"""Zeros from stretches of blocked beam: one that is being taken now, those the past offers, and entering one."""

from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any, Final

import numpy as np

from analysis.models import Calibration, RollupDue
from analysis.quantities import FloatArray, linear_from_raw
from analysis.record.calibrations import version_at
from analysis.reduce.zero import PortZero, Unfit, bright_level, dark_stretches, port_zero
from ingest.models import Tap, TapHeard, TapKind, Touch
from ingest.store.columns import Readings
from ingest.store.read import newest_readings, read_readings
from ingest.times import SECOND_US, at_of, us_of
from ingest.times import now_us as server_now_us
from labmon.benches.calibration import set_calibration
from labmon.errors import WriteError
from labmon.people.models import Person

SHORTEST_S: Final = 5.0
LONGEST_S: Final = 3600.0
#: Readings of a stretch may come so much later before the stretch counts as complete.
COME_LATE_S: Final = 5.0
_BRIGHT_FROM_US: Final = 86_400 * SECOND_US
_HARVEST_US: Final = 7 * 86_400 * SECOND_US
_HARVEST_LEAST_S: Final = 20.0
MOST_HARVESTED: Final = 8
_PORTS: Final = {TapKind.TWO_PORT: ("port1", "port2"), TapKind.DARK_PORT: ("monitor", "port2")}


@dataclass(frozen=True, slots=True)
class Stretch:
    """A span of data time in which the beam is, or was, blocked."""

    from_at: datetime
    seconds: float

    @property
    def until_at(self) -> datetime:
        return self.from_at + timedelta(seconds=self.seconds)


@dataclass(frozen=True, slots=True)
class ZeroTaking:
    """What a stretch gives so far: each port that was read, by its number.

    ``is_complete``: no more readings are awaited. ``holds_until``: where a later version begins.
    """

    stretch: Stretch
    ports: dict[int, PortZero]
    elapsed_s: float
    is_complete: bool
    holds_until: datetime | None
    before: Calibration | None

    @property
    def is_refused(self) -> bool:
        """Nothing can be entered from this."""
        return not self.ports or any(port.is_refused for port in self.ports.values())


@dataclass(frozen=True, slots=True)
class DuePart:
    """How much of a tap waits to be derived anew: spans, the longest of them, and the whole that was to be made anew."""

    spans: int
    seconds: float
    whole_s: float

    @property
    def percent(self) -> int:
        """How much is done."""
        return round(100 * (1.0 - min(self.seconds / self.whole_s, 1.0))) if self.whole_s > 0.0 else 0


def has_zero(tap: Tap) -> bool:
    """Whether a tap of this kind has zeros at all."""
    return tap.kind in _PORTS


def zero_taking(tap: Tap, stretch: Stretch, *, now_us: int | None = None) -> ZeroTaking:
    """What the stretch says by now; nothing is written.

    Raises:
        WriteError: The stretch is too short, too long or begins in the future.
    """
    clock_us = server_now_us() if now_us is None else now_us
    _check(tap, stretch, clock_us)
    first_us, until_us = us_of(stretch.from_at), us_of(stretch.until_at)
    readings = read_readings(tap.pk, first_us, until_us, columns=_PORTS[TapKind(tap.kind)])
    one, two = _ports(tap, readings)
    bright = _bright_before(tap, first_us)
    ports = {number: port_zero(raw, bright) for number, raw in ((1, one), (2, two)) if np.isfinite(raw).any()}
    following = tap.calibrations.filter(valid_from__gt=stretch.from_at).order_by("valid_from").first()
    return ZeroTaking(
        stretch=stretch,
        ports=ports,
        elapsed_s=min(max((clock_us - first_us) / SECOND_US, 0.0), stretch.seconds),
        is_complete=clock_us > until_us + COME_LATE_S * SECOND_US or has_newer(tap, until_us),
        holds_until=following.valid_from if following else None,
        before=version_at(tap.pk, stretch.from_at),
    )


def enter_zero(tap: Tap, stretch: Stretch, *, by: Person, is_blocked: bool, now_us: int | None = None) -> Calibration:
    """A new version with the zeros, their errors and the floors of the stretch, made anew from the raw readings.

    It holds from the stretch's start. A frozen port gives no floor: that of before stays.
    Raises:
        WriteError: The stretch is not complete, or not fit for a zero, or nobody says that the beam was blocked.
    """
    if not is_blocked:
        raise WriteError("is_blocked", "Nobody has said that the beam was blocked.", "Tick the box if it was.")
    taking = zero_taking(tap, stretch, now_us=now_us)
    if not taking.is_complete:
        raise WriteError("stretch", "The stretch is not over yet.", "Wait until its readings have come.")
    if taking.is_refused:
        raise WriteError("stretch", f"No zero can be taken: {refusal_words(taking)}.", "Block the beam and take it again.")
    changes: dict[str, Any] = {"zero_taken_at": stretch.from_at}
    for number, port in taking.ports.items():
        changes |= {f"zero{number}": port.mean, f"zero{number}_error": port.error}
        if not port.is_frozen:
            changes[f"floor{number}"] = port.sigma
    count = max(port.count for port in taking.ports.values())
    reason = f"zero from {count} readings of {stretch.seconds:g} s with the beam blocked"
    return set_calibration(tap, stretch.from_at, changes, by=by, reason=reason)


def refusal_words(taking: ZeroTaking) -> str:
    """``port 1 is not steady, port 2 is not dark``."""
    if not taking.ports:
        return "no reading came"
    said = [f"port {number} {_VERB.get(why, 'is ' + why.value)}" for number, port in taking.ports.items()
            for why in port.unfit if why is not Unfit.NO_LIGHT_KNOWN]
    return ", ".join(said)


_VERB = {Unfit.TOO_FEW: "gave too few readings"}


def harvested(tap: Tap, *, now_us: int | None = None) -> list[Stretch]:
    """Dark stretches of the last week, newest first: natural shutters and switched-off lasers. One query."""
    clock_us = server_now_us() if now_us is None else now_us
    readings = read_readings(tap.pk, clock_us - _HARVEST_US, clock_us, columns=_PORTS[TapKind(tap.kind)])
    if not len(readings):
        return []
    one, two = _ports(tap, readings)
    gap_s = 3.0 * float(np.median(np.diff(readings.at_us))) / SECOND_US if len(readings) > 1 else 1.0
    found = dark_stretches(readings.at_us, one, two, least_s=_HARVEST_LEAST_S, longest_gap_s=gap_s)
    return [Stretch(at_of(first_us), min((last_us - first_us) / SECOND_US, LONGEST_S))
            for first_us, last_us in found[-MOST_HARVESTED:][::-1]]


def being_made_anew(tap: Tap) -> DuePart:
    """What of a tap's derived values still waits after a change of its calibration."""
    rows = [*RollupDue.objects.filter(tap=tap).values_list("first_at_us", "last_at_us"),
            *Touch.objects.filter(tap=tap).values_list("first_at_us", "last_at_us")]
    spans = [(last_us - first_us) / SECOND_US for first_us, last_us in rows if last_us - first_us > 120 * SECOND_US]
    return DuePart(len(spans), max(spans, default=0.0), _whole_s(tap) if spans else 0.0)


def _whole_s(tap: Tap) -> float:
    """The readings that the version entered last holds for."""
    entered = tap.calibrations.order_by("-entered_at", "-pk").first()
    heard = TapHeard.objects.filter(tap=tap).first()
    if entered is None or heard is None:
        return 0.0
    following = tap.calibrations.filter(valid_from__gt=entered.valid_from).order_by("valid_from").first()
    until_us = min(us_of(following.valid_from), heard.last_at_us) if following else heard.last_at_us
    return max((until_us - us_of(entered.valid_from)) / SECOND_US, 0.0)


def _check(tap: Tap, stretch: Stretch, clock_us: int) -> None:
    if not has_zero(tap):
        raise WriteError("tap", f"A {tap.kind} tap has no zero of its own.", "Choose a two-port or dark-port tap.")
    check_stretch(stretch, clock_us)


def check_stretch(stretch: Stretch, clock_us: int) -> None:
    """A stretch that can be watched.

    Raises:
        WriteError: It is too short, too long or begins in the future.
    """
    if not SHORTEST_S <= stretch.seconds <= LONGEST_S:
        raise WriteError("seconds", f"{stretch.seconds:g} s is too short or too long.",
                         f"Give {SHORTEST_S:g} to {LONGEST_S:g} s.")
    if us_of(stretch.from_at) > clock_us + 60 * SECOND_US:
        raise WriteError("from", "The stretch begins in the future.", "Begin now, or at a time that has been.")


def _ports(tap: Tap, readings: Readings) -> tuple[FloatArray, FloatArray]:
    """Port 1 (of dark-port taps the monitor) and port 2 on a linear scale, NaN where absent."""
    first, second = _PORTS[TapKind(tap.kind)]
    return linear_from_raw(readings.column(first), tap.unit), linear_from_raw(readings.column(second), tap.unit)


def _bright_before(tap: Tap, first_us: int) -> float | None:
    """The bright light of the day before the stretch; where that was dark too, of the last readings before."""
    readings = read_readings(tap.pk, first_us - _BRIGHT_FROM_US, first_us, columns=_PORTS[TapKind(tap.kind)])
    return bright_level(*_ports(tap, readings)) if len(readings) else None


def has_newer(tap: Tap, until_us: int) -> bool:
    """Whether a reading from behind a data time has come."""
    newest = newest_readings([tap.pk])[tap.pk]
    return bool(len(newest)) and int(newest.at_us[-1]) >= until_us
