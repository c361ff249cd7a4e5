"""The question "will it hold?" put to an experiment's stored past: one clearance a limit, and all of them together.

labmon says what past windows would have done from today's state. It advises a person; it sets and drives nothing.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from django.db.models import Q

from analysis.outlook.clearance import Clearance, clear_angle_run, clear_sop_run
from analysis.outlook.courses import replayed_courses_rad
from analysis.outlook.minutes import Air, hour_of, is_working_day
from analysis.outlook.together import Together, cleared_together
from analysis.outlook.window import PlannedRun, StartReading
from analysis.quantities import US_PER_S, FloatArray, angle_between_rad
from analysis.record.start_state import StartState, start_state
from ingest.models import TapHeard, TapKind
from ingest.times import at_of
from labmon.alarms.models import Alarm, AlarmLevel
from labmon.benches.pace import interval_of
from labmon.clearance.history import LimitHistory, limit_history
from labmon.clearance.limits import AskedLimit, limits_at
from labmon.errors import WriteError
from labmon.experiments.models import Experiment

LONGEST_S: Final = 31 * 86_400.0
SHORTEST_S: Final = 60.0
FURTHEST_AHEAD_US: Final = 400 * 86_400 * US_PER_S
#: A newest reading older than this (or than three intervals of a slow tap) is no reading of now.
STALE_US: Final = 600 * US_PER_S
#: The room's temperature now says something about a run that starts within this.
AIR_HOLDS_US: Final = 3600 * US_PER_S
#: Courses are drawn in so many steps, and no more of them than this: all that failed, and the newest of those that held.
STEPS: Final = 96
MOST_COURSES: Final = 60


@dataclass(frozen=True, slots=True, kw_only=True)
class Question:
    """What is asked: a start, a length, the seconds beyond the limit that the run bears; and when it is asked, µs."""

    start_us: int
    length_s: float
    allowed_s: float = 0.0
    asked_us: int

    @property
    def known_until_us(self) -> int:
        """Nothing later is used: the moment of asking, or the start where that is past (what would have been said then)."""
        return min(self.asked_us, self.start_us)


@dataclass(frozen=True, slots=True, eq=False)
class Course:
    """One window replayed from today's state: when it began, µs, and its worst angle in equal steps, rad (NaN: not judged)."""

    start_us: int
    angle_rad: FloatArray
    has_failed: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LimitAnswer:
    """The answer for one limit; ``courses`` oldest first, of ``drawn_of`` windows that count."""

    asked: AskedLimit
    clearance: Clearance
    start: StartState
    now_rad: float
    changed_at_us: int | None
    doubtful_share: float
    courses: tuple[Course, ...]
    is_told: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Answer:
    """The answer for an experiment; ``together`` is None where it has no limit on ER or angle."""

    question: Question
    together: Together | None
    limits: tuple[LimitAnswer, ...]
    open_causes: tuple[str, ...]


def checked_question(start_us: int, length_s: float, allowed_s: float, asked_us: int) -> Question:
    """A question that can be answered.

    Raises:
        WriteError: Length, allowed seconds or start out of range.
    """
    if not SHORTEST_S <= length_s <= LONGEST_S:
        raise WriteError("length_s", f"A run of {length_s:g} s cannot be asked about.", "Choose from a minute to 31 days.")
    if not 0.0 <= allowed_s < length_s:
        raise WriteError("allowed_s", f"{allowed_s:g} s beyond the limit cannot be.", "Choose from 0 to the run's length.")
    if start_us > asked_us + FURTHEST_AHEAD_US:
        raise WriteError("start", "The start is too far ahead.", "Choose one within the next 400 days.")
    return Question(start_us=start_us, length_s=length_s, allowed_s=allowed_s, asked_us=asked_us)


def clearance_of(experiment: Experiment, question: Question, limits: Sequence[AskedLimit] | None = None) -> Answer:
    """Answer from what is stored; writes nothing.

    Args:
        limits: Those that the run is judged by (copied at its start); None: those in force.
    """
    known_us = question.known_until_us
    asked = limits_at(experiment, at_of(known_us)) if limits is None else list(limits)
    causes = open_causes(experiment, known_us)
    answers = tuple(_answer(one, question, causes) for one in asked)
    together = cleared_together([one.clearance for one in answers]) if answers else None
    return Answer(question=question, together=together, limits=answers, open_causes=causes)


def open_causes(experiment: Experiment, at_us: int) -> tuple[str, ...]:
    """What stood open at a moment for the experiment's taps: alarms that had not returned, in words.

    A warning without a known cause is none: the replay itself knows that the limit is near.
    """
    at = at_of(at_us)
    rows = Alarm.objects.filter(Q(limit=None) | Q(experiment=experiment), tap__experiments=experiment, raised_at__lte=at,
                                is_withdrawn=False)
    rows = rows.exclude(returned_at__lte=at).exclude(level=AlarmLevel.WARNING, cause="")
    found = sorted(rows.values_list("raised_at", "cause", "message"))
    return tuple(dict.fromkeys(f"{message} (cause: {cause})" if cause else message for _, cause, message in found))


def _answer(asked: AskedLimit, question: Question, causes: tuple[str, ...]) -> LimitAnswer:
    known_us = question.known_until_us
    history = limit_history(asked, question.start_us, question.length_s, known_us)
    start = _start(asked, history, known_us)
    run = _planned(question, history)
    now = StartReading(state=start.state, is_trusted=start.is_trusted, is_at_floor=start.is_at_floor, open_causes=causes)
    windows = history.paths if history.paths is not None else ()
    if history.wanted is None:
        clearance = clear_angle_run(windows, run, now, asked.limit_rad)
        now_rad = float(np.asarray(start.state)) if np.ndim(start.state) == 0 else float("nan")
    else:
        clearance = clear_sop_run(windows, run, now, asked.limit_rad, wanted=history.wanted)
        now_rad = _angle_rad(start, history)
    return LimitAnswer(
        asked=asked, clearance=clearance, start=start, now_rad=now_rad, changed_at_us=run.changed_at_us,
        doubtful_share=history.doubtful_share, courses=_courses(history, clearance, start, question), is_told=history.is_told)


def _start(asked: AskedLimit, history: LimitHistory, known_us: int) -> StartState:
    """The state to start from; none where the newest reading is old, or says nothing."""
    is_on_sphere = asked.tap.kind == TapKind.STOKES and history.wanted is not None
    interval_s = interval_of(asked.tap)
    heard = TapHeard.objects.filter(tap=asked.tap).values_list("last_at_us", flat=True).first()
    newest_us = known_us if heard is None else min(heard, known_us)
    stale_us = max(STALE_US, round(3.0 * interval_s * US_PER_S))
    if heard is None or known_us - newest_us > stale_us:
        nothing = np.full(3, np.nan) if is_on_sphere else float("nan")
        return StartState(state=nothing, at_us=heard, is_trusted=False, why_not=("no reading now",))
    return start_state(asked.tap, asked.quantity, newest_us, asked.limit_rad, interval_s=interval_s, is_on_sphere=is_on_sphere)


def _planned(question: Question, history: LimitHistory) -> PlannedRun:
    start_us = question.start_us
    changes = [at_us for at_us in history.happened.changed_at_us if at_us <= question.known_until_us]
    return PlannedRun(
        start_us=start_us, length_s=question.length_s, start_hour=hour_of(start_us), is_working_day=is_working_day(start_us),
        allowed_s=question.allowed_s, temperature_k=_temperature_now_k(history.air, question),
        changed_at_us=max(changes, default=None))


def _temperature_now_k(air: Air | None, question: Question) -> float | None:
    """Of the newest hour, where the run starts soon."""
    known_us = question.known_until_us
    if air is None or question.start_us - known_us > AIR_HOLDS_US or not len(air.at_us):
        return None
    middle_k = 0.5 * (air.low_k + air.high_k)
    recent = np.flatnonzero(np.isfinite(middle_k) & (air.at_us > known_us - 2 * air.span_us) & (air.at_us <= known_us))
    return float(middle_k[recent[-1]]) if len(recent) else None


def _angle_rad(start: StartState, history: LimitHistory) -> float:
    return float(angle_between_rad(np.asarray(start.state), np.asarray(history.wanted)))


def _courses(history: LimitHistory, clearance: Clearance, start: StartState, question: Question) -> tuple[Course, ...]:
    if history.paths is None or not clearance.counted or not np.all(np.isfinite(start.state)):
        return ()
    failed = {window.start_us for window in clearance.failed}
    held = [start_us for start_us in clearance.counted if start_us not in failed]
    drawn = {*list(failed)[:MOST_COURSES], *held[-max(MOST_COURSES - len(failed), 0):][:MOST_COURSES]}
    index = np.array([number for number, window in enumerate(history.paths.windows) if window.start_us in drawn], dtype=np.int64)
    found = replayed_courses_rad(history.paths, start.state, history.wanted, index, question.length_s, STEPS)
    return tuple(Course(history.paths.windows[number].start_us, row, history.paths.windows[number].start_us in failed)
                 for number, row in zip(index.tolist(), found, strict=True))
