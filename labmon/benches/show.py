"""From stored samples to what a bench shows: state word, smallest margin, silence. No queries here."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from typing import Any

import numpy as np

from analysis.judge.margin import margin_of
from analysis.judge.presence import Presence, cadence_s, presences
from analysis.judge.rule import LimitRule, Quantity
from analysis.record.tap_state import TapState
from ingest.models import Tap
from ingest.times import at_of
from labmon.alarms.words import span_text

DEFAULT_SILENCE_S = 60.0
#: A tap that is heard more often counts as heard this often: a short hiccup of a fast one is no silence.
LEAST_USUAL_S = 1.0


class BenchState(StrEnum):
    """One phrase a bench, worst first."""

    BELOW = "below limit"
    SILENT = "no reading"
    UNTRUSTED = "untrusted"
    UNDECIDED = "undecided"
    THIN = "thin"
    NEVER = "never heard"
    NO_LIMIT = "no limit"
    IN_SPEC = "in spec"


@dataclass(frozen=True, slots=True)
class NowSample:
    """A tap's newest reduced sample; quantities that are untrusted or undefined are None, with reasons beside."""

    taken_at: datetime
    age_s: float
    er_db: float | None
    er_sigma_db: float | None
    is_lower_bound: bool
    is_upper_bound: bool
    angle_deg: float | None
    angle_is_upper_bound: bool
    angle_is_lower_bound: bool
    polarized_er_db: float | None
    dop: float | None
    power_w: float | None
    azimuth_deg: float | None
    ellipticity_deg: float | None
    sop: list[float] | None
    temperature_c: float | None
    humidity_pct: float | None
    pressure_hpa: float | None
    trust: str
    trust_reasons: list[str]
    trust_by_quantity: dict[str, Any]
    last_trusted: dict[str, Any]

    def value(self, quantity: str) -> float | None:
        """A judged quantity in its limit's unit."""
        return getattr(self, quantity)

    def is_bound(self, quantity: str) -> bool:
        """True if the value is a bound on its good side: show >= (angle: <=)."""
        return {"er_db": self.is_lower_bound, "angle_deg": self.angle_is_upper_bound}.get(quantity, False)


_FIELDS = (
    "er_db",
    "er_sigma_db",
    "is_lower_bound",
    "is_upper_bound",
    "angle_deg",
    "angle_is_upper_bound",
    "angle_is_lower_bound",
    "polarized_er_db",
    "dop",
    "power_w",
    "azimuth_deg",
    "ellipticity_deg",
    "sop",
    "temperature_c",
    "humidity_pct",
    "pressure_hpa",
    "trust_by_quantity",
    "last_trusted",
)


def now_sample(at_us: int, sample: Mapping[str, Any], now_us: int) -> NowSample:
    """A stored sample (`TapNow.sample`) as the doors take it; ``trust`` is that of ER."""
    er_trust = sample["trust_by_quantity"].get("er_db", {"trust": "none", "reasons": []})
    return NowSample(
        taken_at=at_of(at_us),
        age_s=(now_us - at_us) / 1e6,
        trust=er_trust["trust"],
        trust_reasons=er_trust["reasons"],
        **{name: sample[name] for name in _FIELDS},
    )


@dataclass(frozen=True, slots=True)
class ShownMargin:
    """How far a tap is from a limit; None where it has no meaning or there is no value."""

    limit_id: int
    quantity: str
    value: float | None
    alarm: float
    warning: float | None
    margin_db: float | None
    margin_deg: float | None
    is_bound: bool

    @property
    def is_below(self) -> bool | None:
        """True beyond the alarm level; None where it cannot be told."""
        return None if self.value is None else self._is_beyond(self.alarm)

    @property
    def is_thin(self) -> bool:
        """True between warning and alarm level."""
        return self.value is not None and self.warning is not None and self._is_beyond(self.warning)

    def _is_beyond(self, level: float) -> bool | None:
        is_beyond = self.value > level if Quantity(self.quantity).is_bad_above else self.value < level  # type: ignore[operator]
        return None if is_beyond and self.is_bound else is_beyond

    @property
    def share(self) -> float:
        """For sorting: margin as a share of the limit, so that different quantities compare; inf where unknown."""
        if self.value is None or not self.alarm:
            return float("inf")
        sign = -1.0 if Quantity(self.quantity).is_bad_above else 1.0
        return sign * (self.value - self.alarm) / abs(self.alarm)


def shown_margin(limit_id: int, rule: LimitRule, sample: NowSample | None) -> ShownMargin:
    """The margin of a sample against a limit's rule."""
    quantity = rule.quantity.value
    value = sample.value(quantity) if sample else None
    if value is None or sample is None:
        return ShownMargin(limit_id, quantity, None, rule.alarm, rule.warning, None, None, False)
    margin = margin_of(rule.quantity, value, rule.alarm)
    margin_db, margin_deg = (float(one) if np.isfinite(one) else None for one in (margin.margin_db, margin.margin_deg))
    return ShownMargin(limit_id, quantity, value, rule.alarm, rule.warning, margin_db, margin_deg, sample.is_bound(quantity))


def smallest(margins: Sequence[ShownMargin]) -> ShownMargin | None:
    """The one a bench shows: the smallest in degrees, of those without degrees in dB, else by share; without values the first."""
    for name in ("margin_deg", "margin_db"):
        known = [margin for margin in margins if getattr(margin, name) is not None]
        if known:
            return min(known, key=lambda margin: getattr(margin, name))
    return min(margins, key=lambda margin: margin.share, default=None)


@dataclass(frozen=True, slots=True)
class Silence:
    """How long nothing came while the door was up, and whether that is to be shown or called."""

    silent_s: float
    is_shown: bool
    is_called: bool
    usual_s: float = 0.0

    @property
    def words(self) -> str:
        """``no reading for 4 min``; empty while readings come."""
        return f"no reading for {span_text(self.silent_s)}" if self.is_shown else ""


def silences_of(
    taps: Sequence[tuple[Tap, TapState | None, int]], call_after_s: Mapping[int, float], door_up: Any, now_us: int
) -> dict[int, Silence]:
    """Silence of taps (tap, state, last arrival µs): counted on the server's clock while a door was up."""
    if not taps:
        return {}
    last_us = np.array([last for _, _, last in taps], dtype=np.int64)
    usual_s = np.array([usual_arrival_s(tap, state) for tap, state, _ in taps])
    called_s = np.array([call_after_s.get(tap.pk, DEFAULT_SILENCE_S) for tap, _, _ in taps])
    found = presences(last_us, now_us, door_up, usual_s, called_s)
    return {
        tap.pk: Silence(max((now_us - last) / 1e6, 0.0), presence is not Presence.PRESENT, presence is Presence.SILENT, usual)
        for (tap, _, last), presence, usual in zip(taps, found, usual_s.tolist(), strict=True)
    }


def usual_arrival_s(tap: Tap, state: TapState | None) -> float:
    """Usual time between arrivals, s: a station that sends batches is heard less often than it measures."""
    interval_s = tap.interval_s or (state.interval.interval_s if state else None)
    return max(
        cadence_s(np.array(state.arrivals_us if state else (), dtype=np.int64), interval_s) or LEAST_USUAL_S, LEAST_USUAL_S
    )


def state_of_tap(margins: Sequence[ShownMargin], sample: NowSample | None, silence: Silence | None) -> BenchState:
    """The phrase for one tap."""
    if silence is None:
        return BenchState.NEVER
    if silence.is_shown:
        return BenchState.SILENT
    if any(margin.is_below for margin in margins):
        return BenchState.BELOW
    watched = {margin.quantity for margin in margins} or {"er_db"}
    if sample is not None and any(sample.trust_by_quantity.get(quantity, {}).get("trust") == "untrusted" for quantity in watched):
        return BenchState.UNTRUSTED
    if not margins:
        return BenchState.NO_LIMIT
    if sample is not None and any(
        "undecided" in sample.trust_by_quantity.get(quantity, {}).get("codes", ()) for quantity in watched
    ):
        return BenchState.UNDECIDED
    return BenchState.THIN if any(margin.is_thin for margin in margins) else BenchState.IN_SPEC


WORST_FIRST = (
    BenchState.BELOW,
    BenchState.SILENT,
    BenchState.UNTRUSTED,
    BenchState.UNDECIDED,
    BenchState.THIN,
    BenchState.IN_SPEC,
    BenchState.NO_LIMIT,
    BenchState.NEVER,
)
