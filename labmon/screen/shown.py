"""The history of one tap as it is shown: in the drawn unit, values held as long as the contract lets them, gaps named."""

from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np

from analysis.record.rollups import history
from ingest.models import Tap, TapKind, Unit
from labmon.api.span import Span
from labmon.benches.pace import interval_of
from labmon.screen.present import age_text, count_text, number_text, time_text
from labmon.screen.quantity import QUANTITIES
from labmon.screen.scaled import FloatArray, dbm_of, gaps_of, held

HOLD_INTERVALS = 3.0
#: Rollups of the newest seconds may be a moment behind: that is no gap.
LATEST_MS = 30_000.0
TABLE_ROWS = 48
_WITHOUT_WATTS = {Unit.VOLT, Unit.COUNT}


@dataclass(frozen=True, slots=True, kw_only=True)
class Shown:
    """Curves on an even grid; ``low``, ``mean``, ``high`` in the drawn unit (power in dBm), NaN in a gap; shape (N,)."""

    quantity: str
    x0_ms: float
    dx_ms: float
    low: FloatArray
    mean: FloatArray
    high: FloatArray
    trusted_share: FloatArray

    @property
    def is_known(self) -> np.ndarray:
        """True where there is a mean."""
        return np.isfinite(self.mean)


@dataclass(frozen=True, slots=True, kw_only=True)
class Gap:
    """Time without value, ms since 1970, and why: nothing came, or what came has no such value."""

    from_ms: float
    until_ms: float
    word: str


def shown_history(tap: Tap, quantity: str, span: Span, points: int) -> Shown:
    """Curves of at most ``points`` buckets, none finer than the tap measures."""
    return _curves(tap, quantity, span, points, dbm_of if quantity == "power_w" else np.asarray)


def _curves(tap: Tap, quantity: str, span: Span, points: int, drawn: Callable[[FloatArray], FloatArray]) -> Shown:
    """The history, its values turned by ``drawn`` into what is drawn, each held until the next."""
    interval_s = interval_of(tap)
    span_s = (span.until_us - span.from_us) / 1e6
    found = history(tap.pk, quantity, span.from_us, span.until_us, max(1, min(points, int(span_s / interval_s))))
    hold = int(HOLD_INTERVALS * interval_s / found.bucket_s)
    trusted = np.where(np.isfinite(found.mean), found.trusted_share, np.nan)
    low, mean, high, share = (held(column, hold) for column in (drawn(found.min), drawn(found.mean), drawn(found.max), trusted))
    x0_ms = float(found.at_us[0]) / 1e3 if len(found.at_us) else span.from_us / 1e3
    dx_ms = found.bucket_s * 1e3
    return Shown(quantity=quantity, x0_ms=x0_ms, dx_ms=dx_ms, low=low, mean=mean, high=high, trusted_share=share)


def gaps_in(shown: Shown, tap: Tap, span: Span, points: int, now: datetime) -> list[Gap]:
    """Time without value inside the span, up to now, each named."""
    from_ms, until_ms = span.from_us / 1e3, min(span.until_us / 1e3, now.timestamp() * 1e3)
    bare = gaps_of(shown.is_known, shown.x0_ms, shown.dx_ms)
    clipped = [(max(start, from_ms), min(end, until_ms)) for start, end in bare]
    is_latest = until_ms > now.timestamp() * 1e3 - LATEST_MS
    kept = [
        (start, end) for start, end in clipped if end > start and not (is_latest and end == until_ms and end - start < LATEST_MS)
    ]
    if not kept:
        return []
    heard = _heard(shown, tap, span, points)
    return [Gap(from_ms=start, until_ms=end, word=_word(heard, tap, start, end)) for start, end in kept]


def _heard(shown: Shown, tap: Tap, span: Span, points: int) -> Shown:
    """Where anything came at all: power is there in the dark and in saturation too."""
    if tap.kind == TapKind.CLIMATE or shown.quantity in {"power_w", "temperature_c"} or tap.unit in _WITHOUT_WATTS:
        return shown
    return _curves(tap, "power_w", span, points, np.asarray)


def _word(heard: Shown, tap: Tap, from_ms: float, until_ms: float) -> str:
    """``no reading`` unless something came in more than half of the gap."""
    if tap.unit in _WITHOUT_WATTS:
        return "no value"
    times = heard.x0_ms + (np.arange(len(heard.mean)) + 0.5) * heard.dx_ms
    inside = heard.is_known[(times >= from_ms) & (times < until_ms)]
    return "no value" if len(inside) and inside.mean() > 0.5 else "no reading"


def history_sentence(shown: Shown, gaps: list[Gap]) -> str:
    """The history in one sentence."""
    quantity = QUANTITIES[shown.quantity]
    if not shown.is_known.any():
        return f"{gaps[0].word[0].upper()}{gaps[0].word[1:]} in this span." if gaps else "No reading in this span."
    low, high = float(np.nanmin(shown.low)), float(np.nanmax(shown.high))
    ends = [number_text(value, quantity.places, quantity.unit) for value in (low, high)]
    said = f"{quantity.name} between {ends[0]} and {ends[1]}"
    for word in dict.fromkeys(gap.word for gap in gaps):
        spans_s = [(gap.until_ms - gap.from_ms) / 1e3 for gap in gaps if gap.word == word]
        said += f"; {count_text(len(spans_s), 'gap')} with {word}, {age_text(sum(spans_s))} in all"
    return f"{said}."


def history_rows(tap: Tap, quantity: str, span: Span) -> list[tuple[str, str, str, str, str]]:
    """The same as rows of a table: time, lowest, mean, highest, share trusted."""
    shown = shown_history(tap, quantity, span, TABLE_ROWS)
    places = QUANTITIES[quantity].places
    columns = (shown.low, shown.mean, shown.high)
    return [
        (
            _clock(shown.x0_ms + index * shown.dx_ms),
            *(number_text(float(column[index]), places) for column in columns),
            number_text(float(shown.trusted_share[index]) * 100, 0, "%"),
        )
        for index in range(len(shown.mean))
    ]


def _clock(at_ms: float) -> str:
    return time_text(datetime.fromtimestamp(at_ms / 1e3, UTC))
