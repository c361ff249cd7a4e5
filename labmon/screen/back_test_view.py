"""Back-tests in words and tables. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from ingest.times import at_of
from labmon.clearance.told import told_of
from labmon.clearance.words import per_cent
from labmon.screen.present import count_text, number_text, time_text

MOST_WRONG = 50


@dataclass(frozen=True, slots=True, kw_only=True)
class RuleRow:
    """A rule of go or no go: what it clears, what of that held, and its score with parts."""

    name: str
    clears: str
    held: str
    score: str
    reliability: str
    resolution: str
    skill: str


@dataclass(frozen=True, slots=True, kw_only=True)
class SaidRow:
    """A line of the reliability table; positions in per cent for the small rail."""

    said: str
    came_out: str
    count: str
    interval: str
    is_as_said: bool
    low: float
    width: float
    said_at: float
    out_at: float


@dataclass(frozen=True, slots=True, kw_only=True)
class WrongRow:
    """A night that was cleared and failed."""

    bench: str
    href: str
    began: str
    said: str
    failed: str
    known: str


@dataclass(frozen=True, slots=True, kw_only=True)
class BackTestView:
    """A back-test of a limit, of an experiment or of the lab."""

    sentence: str
    rules: list[RuleRow]
    table: list[SaidRow]
    base: str
    not_told: str


def back_test_view(facts: dict[str, Any], of: str) -> BackTestView:
    """Stored facts (`back_test_facts`) for a page; ``of``: whose nights, such as ``this lab``."""
    count = facts["windows"]
    replay = facts["replay"] | {name: facts[name] for name in ("cleared", "cleared_held")}
    rules = [
        _rule("Clearance (replay)", replay, count),
        _rule("Rule of thumb: now 3 dB above the limit", facts["margin"], count),
        _rule("Rule of thumb: 90 % of past nights held", facts["past"], count)]
    return BackTestView(
        sentence=_sentence(facts, of), rules=rules if count else [], table=[_said(row) for row in facts["table"]],
        base="" if facts["base_share"] is None else
        f"{per_cent(facts['base_share'])} of these nights held by themselves; always quoting that would score "
        f"{number_text(facts['replay']['uncertainty'], 3)}.",
        not_told=f"For {count_text(facts['not_told'], 'further night')} there was not enough evidence to say anything."
        if facts["not_told"] else "")


def _sentence(facts: dict[str, Any], of: str) -> str:
    wrong = facts["cleared"] - facts["cleared_held"]
    if not facts["windows"]:
        return f"No night of {of} has enough earlier ones to be asked about yet."
    if not facts["cleared"]:
        return f"Of {count_text(facts['windows'], 'night')} of {of} that could be asked about none would have been cleared."
    if not wrong:
        return f"Of {count_text(facts['cleared'], 'cleared night')} of {of} every one held."
    return f"Of {count_text(facts['cleared'], 'cleared night')} of {of} {facts['cleared_held']} held and {wrong} failed."


def _rule(name: str, facts: dict[str, Any], count: int) -> RuleRow:
    cleared, held = facts["cleared"], facts["cleared_held"]
    return RuleRow(
        name=name, clears=f"{cleared} ({per_cent(cleared / count)})" if count else "0",
        held=f"{held} ({per_cent(held / cleared)})" if cleared else "–", score=number_text(facts["score"], 3),
        reliability=number_text(facts["reliability"], 3), resolution=number_text(facts["resolution"], 3),
        skill=number_text(facts["skill"], 2))


def _said(row: dict[str, Any]) -> SaidRow:
    return SaidRow(
        said=number_text(row["said"], 2), came_out=number_text(row["came_out"], 2), count=f"{row['came_true']} of {row['count']}",
        interval=f"{row['low']:.2f} to {row['high']:.2f}", is_as_said=row["is_as_said"], low=100 * row["low"],
        width=max(100 * (row["high"] - row["low"]), 0.5), said_at=100 * row["said"], out_at=100 * row["came_out"])


def wrong_rows(kept: Sequence[tuple[str, str, dict[str, Any]]]) -> tuple[list[WrongRow], int]:
    """Wrong clearances of (bench, address, facts), newest first, and how many are left out."""
    nights = sorted(((told_of(one), bench, href) for bench, href, facts in kept for one in facts["wrong"]),
                    key=lambda row: (-row[0].start_us, row[1]))
    rows = [WrongRow(bench=bench, href=href, began=time_text(at_of(night.start_us)),
                     said=f"{night.held} of {night.count}",
                     failed=time_text(at_of(night.failed_at_us)) if night.failed_at_us else "–",
                     known="; ".join(night.labels) or "nobody knows") for night, bench, href in nights[:MOST_WRONG]]
    return rows, max(len(nights) - MOST_WRONG, 0)
