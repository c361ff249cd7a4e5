"""A clearance in the words and tables of a page. Pure."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

from analysis.outlook.clearance import FailedWindow
from ingest.times import at_of
from labmon.clearance.ask import Answer, LimitAnswer
from labmon.clearance.checklist import Point, Standing
from labmon.clearance.words import (
    counts,
    per_cent,
    reasons,
    remedies,
    sentence,
    set_aside_words,
    times_words,
    widened_words,
    window_word,
)
from labmon.screen.level_words import both_units
from labmon.screen.present import age_text, count_text, number_text, time_text
from labmon.screen.replay_picture import replay_picture, spoken_picture

_TICKS = {Standing.READY: "tick-done", Standing.LOOK: "tick-fault", Standing.UNKNOWN: "tick-waits"}
MOST_FAILED = 50


@dataclass(frozen=True, slots=True, kw_only=True)
class PointView:
    """A line of the checklist."""

    mark: str
    standing: str
    what: str
    about: str
    said: str
    do: str


@dataclass(frozen=True, slots=True, kw_only=True)
class FailedView:
    """A window that would have failed."""

    began: str
    after: str
    beyond: str
    worst: str
    known: str


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitView:
    """One limit's part of the answer; ``picture`` is SVG, empty where there is nothing to draw."""

    key: str
    title: str
    said: str
    notes: list[str]
    picture: str
    drawn: str
    failed: list[FailedView]
    left_out: int


@dataclass(frozen=True, slots=True, kw_only=True)
class ClearanceView:
    """All of the section."""

    sentence: str
    asked: str
    times: str
    reasons: list[str]
    remedies: list[str]
    limits: list[LimitView]
    points: list[PointView]
    looks: int


def clearance_view(answer: Answer, points: Sequence[Point]) -> ClearanceView:
    """An answer and a checklist for a page."""
    shown = [_point_view(point) for point in points]
    return ClearanceView(
        sentence=sentence(answer), asked=_asked(answer), times=times_words(answer), reasons=reasons(answer),
        remedies=remedies(answer), limits=[_limit_view(limit, answer) for limit in answer.limits], points=shown,
        looks=sum(point.standing != Standing.READY.value for point in shown))


def _asked(answer: Answer) -> str:
    question = answer.question
    said = f"For {age_text(question.length_s)} from {time_text(at_of(question.start_us))} UTC"
    if question.allowed_s > 0.0:
        said += f", with at most {age_text(question.allowed_s)} beyond the limit"
    if question.start_us > question.asked_us + 60_000_000:
        return (f"{said}. Answered at {time_text(at_of(question.asked_us))} UTC from the state then; "
                "what happens until the start is not in it.")
    if question.start_us < question.asked_us - 60_000_000:
        return f"{said}: what would have been said at that time."
    return f"{said}."


def _limit_view(limit: LimitAnswer, answer: Answer) -> LimitView:
    said, word = limit.clearance, window_word(answer.question)
    counted = counts(said, word)
    drawn = len(limit.courses)
    return LimitView(
        key=f"{limit.asked.limit_id}",
        title=f"{limit.asked.tap_name}, {both_units(limit.asked.quantity.value, limit.asked.alarm)}",
        said="" if len(answer.limits) == 1 else f"{said.verdict.value.capitalize()}: {counted}.", notes=_notes(limit, word),
        picture=replay_picture(limit, answer.question.length_s, spoken_picture(limit, counted)),
        drawn=f"{drawn} of {count_text(said.count, word)} drawn, the newest." if drawn < said.count else "",
        failed=[_failed_view(one, limit) for one in said.failed[-MOST_FAILED:][::-1]],
        left_out=max(len(said.failed) - MOST_FAILED, 0))


def _notes(limit: LimitAnswer, word: str) -> list[str]:
    said, notes = limit.clearance, []
    if not limit.is_told:
        notes.append("The tap has no wanted state yet, so that its angle has no meaning.")
    elif not limit.start.is_trusted:
        notes.append(f"The reading now is not trusted: {', '.join(limit.start.why_not)}.")
    elif math.isfinite(limit.now_rad):
        bound = " at most (the dark port is at its floor)" if limit.start.is_bound else ""
        notes.append(f"It stands at {number_text(math.degrees(limit.now_rad), 1, '°')}{bound} now, "
                     f"{number_text(math.degrees(limit.asked.limit_rad - limit.now_rad), 1, '°')} from the limit.")
    if said.widened:
        notes.append(f"Too few {word}s were of this very kind, so: {widened_words(said.widened)}.")
    if limit.changed_at_us is not None:
        notes.append(f"Counted from the last configuration change on, {time_text(at_of(limit.changed_at_us))} UTC.")
    if limit.doubtful_share > 0.01:
        notes.append(f"{per_cent(limit.doubtful_share)} of what was compared was doubtful.")
    if said.set_aside:
        notes.append(f"Not counted: {', '.join(set_aside_words(said.set_aside))}.")
    return notes


def _failed_view(one: FailedWindow, limit: LimitAnswer) -> FailedView:
    worst_deg = math.degrees(one.worst_rad)
    return FailedView(
        began=time_text(at_of(one.start_us)), after=age_text((one.crossed_at_us - one.start_us) / 1e6),
        beyond=age_text(one.beyond_s),
        worst=f"{number_text(worst_deg, 1, '°')} ({number_text(worst_deg - math.degrees(limit.asked.limit_rad), 1, '°')} beyond)",
        known="; ".join(one.labels) or "nobody knows")


def _point_view(point: Point) -> PointView:
    return PointView(mark=_TICKS[point.standing], standing=point.standing.value, what=point.what, about=point.about,
                     said=point.said, do=point.do)
