"""A limit's life in data time: which version rules when, and the fold through all of them.

Pure: no database, no clock.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from analysis.judge.fold import Event, EventKind, FoldState, Level, fold, start_state
from analysis.judge.rule import LimitRule
from analysis.judge.seconds import Seconds
from analysis.quantities import US_PER_S, FloatArray

FOREVER_US = 1 << 62


@dataclass(frozen=True, slots=True)
class Phase:
    """The time in which one version of a limit rules: whole seconds from ``from_us`` up to ``until_us``."""

    version_id: int
    rule: LimitRule
    from_us: int
    until_us: int
    is_retired: bool = False
    in_runs_only: bool = False


@dataclass(frozen=True, slots=True)
class Standing:
    """Where a limit's fold stands: everything before ``at_us`` is folded, under the version ``version_id``."""

    version_id: int
    at_us: int
    state: FoldState


@dataclass(frozen=True, slots=True)
class Found:
    """An event and the version under which it was found."""

    event: Event
    version_id: int


@dataclass(slots=True)
class Episode:
    """An excursion as one stretch of the fold shows it.

    Attributes:
        raised_us: When it was raised, maybe before the stretch; ``returned_us``: None if still open at its end.
        alarm_us: When it reached the alarm level within the stretch (or at its raising), None if not (known here).
        value: The worst value in the stretch while it was open: from its raising on, so that where the stretch was cut
            does not matter.
        is_continued: It was open when the stretch began.
    """

    version_id: int
    raised_us: int
    level: Level
    alarm_us: int | None
    returned_us: int | None
    value: float | None
    is_continued: bool = False


def phases_of(versions: Sequence[tuple[int, LimitRule, int, bool, bool]]) -> list[Phase]:
    """Phases of versions (id, rule, valid_from µs, is retired, in runs only), oldest first; each begins at a whole second."""
    starts = [-(-valid_from_us // US_PER_S) * US_PER_S for _, _, valid_from_us, _, _ in versions]
    ends = [*starts[1:], FOREVER_US]
    return [
        Phase(version_id, rule, begin, end, is_retired, in_runs_only)
        for (version_id, rule, _, is_retired, in_runs_only), begin, end in zip(versions, starts, ends, strict=True)
    ]


def phase_at(phases: Sequence[Phase], at_us: int) -> Phase | None:
    """The phase that rules at a moment; None before the first."""
    return next((phase for phase in reversed(phases) if phase.from_us <= at_us), None)


def fold_through(
    phases: Sequence[Phase], standing: Standing, seconds: Seconds, interval_s: FloatArray | None, until_us: int
) -> tuple[Standing, list[Found]]:
    """Fold the seconds from ``standing`` up to ``until_us`` through the versions that rule meanwhile.

    Args:
        seconds: All of the stretch, maybe more; ``interval_s`` of each, shape (M,), None where it is 1 s or less.
    Returns:
        Where it stands at ``until_us``, and what was found.
    """
    found: list[Found] = []
    bounds = seconds.at_us
    for phase in phases:
        begin_us, end_us = max(phase.from_us, standing.at_us), min(phase.until_us, until_us)
        if phase.until_us <= standing.at_us or begin_us > end_us or phase.from_us > until_us:
            continue
        if phase.version_id != standing.version_id:
            standing = _taken_over(phase, standing, found)
        low, high = np.searchsorted(bounds, [begin_us, end_us])
        state = standing.state
        if high > low and not phase.is_retired:
            own_s = 1.0 if interval_s is None else interval_s[low:high]
            state, events = fold(phase.rule, state, seconds.take(slice(int(low), int(high))), own_s)
            found += [Found(event, phase.version_id) for event in events]
        standing = Standing(phase.version_id, max(end_us, begin_us), state)
    return Standing(standing.version_id, max(standing.at_us, until_us), standing.state), found


def _taken_over(phase: Phase, standing: Standing, found: list[Found]) -> Standing:
    """A new version takes over: the delays start anew; an open episode goes on, or ends if the limit is retired."""
    before = standing.state
    if phase.is_retired and before.level is not None:
        found.append(Found(Event(EventKind.RETURNED, before.level, phase.from_us, phase.from_us, float("nan")), phase.version_id))
        before = FoldState(at_us=before.at_us)
    return Standing(phase.version_id, phase.from_us, start_state(before))


def episodes_in(found: Sequence[Found], before: Standing, seconds: Seconds) -> list[Episode]:
    """Episodes of a stretch that began at ``before``, with the worst value of each while it was open."""
    episodes: list[Episode] = []
    if before.state.level is not None:
        assert before.state.raised_us is not None
        episodes.append(Episode(before.version_id, before.state.raised_us, before.state.level, None, None, None, True))
    open_us = [before.at_us] * len(episodes)
    for one in found:
        event = one.event
        if event.kind is EventKind.RAISED:
            alarm_us = event.at_us if event.level is Level.ALARM else None
            episodes.append(Episode(one.version_id, event.at_us, event.level, alarm_us, None, None))
            open_us.append(event.at_us)
        elif event.kind is EventKind.ROSE:
            episodes[-1].level, episodes[-1].alarm_us, episodes[-1].version_id = Level.ALARM, event.at_us, one.version_id
        else:
            episodes[-1].returned_us = event.at_us
    for episode, since_us in zip(episodes, open_us, strict=True):
        episode.value = _worst(seconds, since_us, FOREVER_US if episode.returned_us is None else episode.returned_us)
    return episodes


def _worst(seconds: Seconds, from_us: int, until_us: int) -> float | None:
    """The worst value that was judged, or None."""
    low, high = np.searchsorted(seconds.at_us, [from_us, until_us])
    values = seconds.worst[low:high]
    values = values[np.isfinite(values)]
    if not len(values):
        return None
    return float(values.max() if seconds.quantity.is_bad_above else values.min())
