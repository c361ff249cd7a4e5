"""Back-tests as JSON and back: a short list a night, and their sum. Pure."""

import math
from collections.abc import Iterable, Sequence
from typing import Any

from analysis.outlook.backtest import BackTest, GoRule, ToldWindow
from analysis.outlook.brier import BrierParts
from analysis.outlook.verdict import Verdict


def told_list(night: ToldWindow) -> list[Any]:
    """A night in the order of `told_of`; NaN becomes None."""
    return [night.start_us, night.verdict.value, night.held, night.count, night.has_held, _number(night.margin_forecast),
            _number(night.past_forecast), night.failed_at_us, list(night.labels)]


def told_of(kept: Sequence[Any]) -> ToldWindow:
    """The night of a list."""
    start_us, verdict, held, count, has_held, margin, past, failed_at_us, labels = kept
    return ToldWindow(start_us=start_us, verdict=Verdict(verdict), held=held, count=count, has_held=has_held,
                      margin_forecast=math.nan if margin is None else margin, past_forecast=math.nan if past is None else past,
                      failed_at_us=failed_at_us, labels=tuple(labels))


def nights_of(kept: Iterable[Sequence[Any]]) -> list[ToldWindow]:
    """All nights of a stored back-test."""
    return [told_of(one) for one in kept]


def back_test_facts(test: BackTest) -> dict[str, Any]:
    """The sum of a back-test; NaN becomes None."""
    return {
        "windows": test.windows, "not_told": test.not_told, "base_share": _number(test.base_share), "cleared": test.cleared,
        "cleared_held": test.cleared_held, "replay": _parts(test.parts), "margin": _rule(test.margin_rule),
        "past": _rule(test.past_rule), "wrong": [told_list(night) for night in test.wrong],
        "table": [{"said": row.said, "came_out": row.came_out, "count": row.count, "came_true": row.came_true, "low": row.low,
                   "high": row.high, "band_low": row.band_low, "band_high": row.band_high, "is_as_said": row.is_as_said}
                  for row in test.table],
    }


def _rule(rule: GoRule) -> dict[str, Any]:
    return _parts(rule.parts) | {"cleared": rule.cleared, "cleared_held": rule.cleared_held}


def _parts(parts: BrierParts) -> dict[str, Any]:
    return {name: _number(getattr(parts, name)) for name in
            ("score", "standard_error", "reliability", "resolution", "uncertainty", "skill")}


def _number(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None
