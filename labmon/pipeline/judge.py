"""Judging a chunk of taps: seconds of all of them in few array calls, then each limit's fold."""

from bisect import bisect_left
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from analysis.judge.fold import EventKind, FoldState, is_idle
from analysis.judge.interval import intervals_s
from analysis.judge.phases import Episode, Found, Standing, episodes_in, fold_through
from analysis.judge.rule import Quantity
from analysis.judge.seconds import Seconds, seconds_of_many
from analysis.judge.untrusted import UntrustedRule, UntrustedState, fold_untrusted
from analysis.quantities import BoolArray, FloatArray, IntArray
from analysis.record.reduce_span import Group, ManyReduced
from analysis.reduce.trust import Trust, reasons_in
from ingest.models import TapKind
from ingest.store.columns import Readings
from ingest.times import at_of
from labmon.alarms.models import Alarm, AlarmKind
from labmon.alarms.settle import Finding
from labmon.alarms.untrusted import UntrustedFinding
from labmon.pipeline.newest import newest_samples
from labmon.pipeline.progress import Progress
from labmon.pipeline.work import LimitWork


@dataclass(slots=True)
class Judged:
    """What judging a chunk gave: findings for the alarms, states to save, samples to show."""

    findings: list[Finding] = field(default_factory=list)
    untrusted: list[UntrustedFinding] = field(default_factory=list)
    newest: list[tuple[int, Standing]] = field(default_factory=list)
    kept: list[Standing] = field(default_factory=list)
    untrusted_states: dict[int, tuple[UntrustedState, int]] = field(default_factory=dict)
    newest_samples: dict[int, dict[str, Any]] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class _TapSeconds:
    """One tap's seconds by quantity, the nominal interval at each, and where one of them was untrusted.

    ``worst`` is the worst certain value of the stretch by quantity (NaN where nothing was judged).
    """

    by_quantity: Mapping[Quantity, Seconds]
    worst: Mapping[Quantity, float]
    at_us: list[int]
    interval_s: FloatArray | None
    is_untrusted: BoolArray | None


def judge(steps: Sequence[Progress], reduced: ManyReduced, readings: Mapping[int, Readings]) -> Judged:
    """Judge every limit of the chunk's taps, and whether their readings may be trusted."""
    judged = Judged()
    by_tap = {step.tap.pk: step for step in steps}
    alarms = _alarms_of(steps)
    for group in reduced.groups:
        members = [by_tap[tap.pk] for tap in group.taps]
        samples = newest_samples(group, [step.work for step in members])
        seconds = _seconds_of_group(group, members)
        for number, (step, sample) in enumerate(zip(members, samples, strict=True)):
            judged.newest_samples[step.tap.pk] = sample
            if seconds is not None:
                own = seconds[number]
                for limit in step.work.limits:
                    _judge_limit(step, limit, own, alarms.get(limit.limit.pk, []), judged)
                _judge_trust(step, own, group, number, judged)
    for step in steps:
        if not len(readings[step.tap.pk]):
            for limit in step.work.limits:
                _judge_limit(step, limit, _NOTHING, alarms.get(limit.limit.pk, []), judged)
    return judged


def _alarms_of(steps: Sequence[Progress]) -> dict[int, list[Alarm]]:
    """Alarms that the chunk's stretches may touch, locked: the open ones, and of stretches judged again all that overlap."""
    forward = [limit.limit.pk for step in steps if not step.stretch.is_again for limit in step.work.limits]
    again = {limit.limit.pk: step for step in steps if step.stretch.is_again for limit in step.work.limits}
    if not forward and not again:
        return {}
    rows = list(
        Alarm.objects.select_for_update(of=("self",))
        .select_related("experiment")
        .filter(limit_id__in=forward, kind=AlarmKind.LIMIT, returned_at=None, is_withdrawn=False)
        .order_by("pk")
    )
    if again:
        since = at_of(min(step.stretch.start_us for step in again.values()))
        past = (
            Alarm.objects.select_for_update(of=("self",))
            .select_related("experiment")
            .filter(limit_id__in=again, kind=AlarmKind.LIMIT)
        )
        rows += [alarm for alarm in past.exclude(returned_at__lt=since).order_by("pk") if _overlaps(alarm, again[alarm.limit_id])]
    found: dict[int, list[Alarm]] = {}
    for alarm in sorted(rows, key=lambda one: (one.is_withdrawn, one.raised_at)):
        found.setdefault(alarm.limit_id, []).append(alarm)
    return found


def _overlaps(alarm: Alarm, step: Progress) -> bool:
    starts_within = step.stretch.is_newest or alarm.raised_at < at_of(step.stretch.end_us)
    return starts_within and (alarm.returned_at is None or alarm.returned_at >= at_of(step.stretch.start_us))


def _seconds_of_group(group: Group, members: Sequence[Progress]) -> list[_TapSeconds] | None:
    """Per tap its seconds; quantities that nobody in the group needs are left out. None where nothing is judged at all."""
    if group.taps[0].kind == TapKind.CLIMATE:
        return None
    wanted = {Quantity(limit.limit.quantity) for step in members for limit in step.work.limits}
    if any(step.work.untrusted_after_s is not None for step in members):
        wanted.add(Quantity.ER_DB)
    if not wanted:
        return None
    whole: dict[Quantity, Seconds] = {}
    doubted: dict[Quantity, BoolArray] = {}
    bounds: IntArray = np.empty(0, dtype=np.int64)
    for quantity in sorted(wanted):
        whole[quantity], bounds = seconds_of_many(group.samples, quantity, group.first)
        starts = np.concatenate([[0], np.cumsum(whole[quantity].count)[:-1]])
        lost = np.logical_or.reduceat(group.samples.trust[quantity] == Trust.UNTRUSTED, starts)
        doubted[quantity] = lost & ~whole[quantity].is_judged
    ends = np.append(bounds[1:], len(next(iter(whole.values()))))
    worst = {quantity: _worst_of_taps(seconds, bounds) for quantity, seconds in whole.items()}
    is_any_lost = {quantity: np.logical_or.reduceat(lost, bounds).tolist() for quantity, lost in doubted.items()}
    at_us = next(iter(whole.values())).at_us.tolist()
    found = []
    for number, (step, begin, end) in enumerate(zip(members, bounds.tolist(), ends.tolist(), strict=True)):
        span = slice(begin, end)
        own = {quantity: seconds.take(span) for quantity, seconds in whole.items()}
        watched = _watched_quantities(step.work.limits) & doubted.keys()
        is_lost = any(is_any_lost[quantity][number] for quantity in watched)
        untrusted = np.logical_or.reduce([doubted[quantity][span] for quantity in watched]) if is_lost else None
        found.append(
            _TapSeconds(
                own,
                {quantity: values[number] for quantity, values in worst.items()},
                at_us[span],
                _intervals(step, own),
                untrusted,
            )
        )
    return found


def _watched_quantities(limits: Sequence[LimitWork]) -> set[Quantity]:
    return {Quantity(limit.limit.quantity) for limit in limits} or {Quantity.ER_DB}


def _worst_of_taps(seconds: Seconds, bounds: IntArray) -> list[float]:
    fold = np.fmax if seconds.quantity.is_bad_above else np.fmin
    return fold.reduceat(seconds.worst, bounds).tolist()


def _intervals(step: Progress, own: Mapping[Quantity, Seconds]) -> FloatArray | None:
    """Nominal interval at each second: declared, else by the fold over all samples; None where it is 1 s or less."""
    declared_s, at_us = step.tap.interval_s, next(iter(own.values())).at_us
    if declared_s is not None:
        return None if declared_s <= 1.0 else np.full(len(at_us), declared_s)
    samples_us = step.readings.at_us
    known = intervals_s(step.work.state.interval, samples_us)
    at_each = known[np.searchsorted(samples_us, at_us)]
    return None if np.nanmax(at_each, initial=0.0) <= 1.0 else at_each


_NOTHING = _TapSeconds({}, {}, [], None, None)


def _empty(quantity: Quantity) -> Seconds:
    nothing, times = np.empty(0), np.empty(0, dtype=np.int64)
    never = np.empty(0, dtype=bool)
    return Seconds(quantity, 1.0, times, nothing, nothing, nothing, never, never, times)


def _judge_limit(step: Progress, limit: LimitWork, own: _TapSeconds, existing: list[Alarm], judged: Judged) -> None:
    quantity = Quantity(limit.limit.quantity)
    seconds = own.by_quantity.get(quantity) or _empty(quantity)
    before = limit.standing_or_start()
    if not existing and (calm := _calm(step, limit, own, before)) is not None:
        at_cut, at_end = calm
        found: list[Found] = []
    else:
        at_cut, found = fold_through(limit.phases, before, seconds, own.interval_s, step.cut_us)
        at_end, more = fold_through(limit.phases, at_cut, seconds, own.interval_s, step.complete_us)
        found += more
        if step.stretch.is_newest and step.complete_us <= step.last_us:
            # The second that is still open can only get worse, so it may raise; it may not return.
            _, maybe = fold_through(limit.phases, at_end, seconds, own.interval_s, step.last_us + 1)
            found += [one for one in maybe if one.event.kind is not EventKind.RETURNED]
    judged.newest.append((limit.limit.pk, at_end))
    if step.keeps_cut and at_cut.at_us == step.cut_us:
        judged.kept.append(at_cut)
    episodes = episodes_in(found, before, seconds) if found or before.state.level is not None else []
    if existing or episodes:
        judged.findings.append(_finding(step, limit, episodes, existing))


def _calm(step: Progress, limit: LimitWork, own: _TapSeconds, before: Standing) -> tuple[Standing, Standing] | None:
    """Where an idle fold stands after seconds of which none is beyond a level; None where it must be folded.

    The same as `fold_through` gives, found by one comparison: most limits are calm most of the time.
    """
    phase, state = limit.phases[-1], before.state
    if phase.version_id != before.version_id or phase.from_us > before.at_us or not is_idle(state):
        return None
    rule, worst = phase.rule, own.worst.get(Quantity(limit.limit.quantity), float("nan"))
    outer = rule.alarm if rule.warning is None else rule.warning
    if not phase.is_retired and (worst > outer if rule.quantity.is_bad_above else worst < outer):
        return None
    ends = []
    for until_us in (step.cut_us, step.complete_us):
        last = bisect_left(own.at_us, until_us) - 1
        at_us = own.at_us[last] if last >= 0 and own.at_us[last] >= before.at_us and not phase.is_retired else state.at_us
        ends.append(Standing(before.version_id, max(before.at_us, until_us), FoldState(at_us=at_us)))
    return ends[0], ends[1]


def _finding(step: Progress, limit: LimitWork, episodes: Sequence[Episode], existing: list[Alarm]) -> Finding:
    return Finding(
        limit=limit.limit,
        tap=step.tap,
        phases=limit.phases,
        episodes=episodes,
        window_us=(step.stretch.start_us, step.stretch.end_us),
        is_newest=step.stretch.is_newest,
        age_us=step.age_us,
        last_us=step.last_us,
        current_within_us=step.current_within_us,
        existing=existing,
        holes=step.holes,
    )


def _judge_trust(step: Progress, own: _TapSeconds, group: Group, number: int, judged: Judged) -> None:
    """The untrusted-reading fold of a watched tap, over complete seconds that it has not seen."""
    work = step.work
    if work.untrusted_after_s is None or not own.by_quantity:
        return
    from_us = max(work.state.untrusted_upto_us or 0, step.stretch.start_us)
    state = work.state.untrusted
    if own.is_untrusted is not None or state.is_open or state.bad_timer.is_running:
        state = _folded_trust(own, state, from_us, step.complete_us, work.untrusted_after_s)
    judged.untrusted_states[step.tap.pk] = (state, max(from_us, step.complete_us))
    if state.is_open or work.state.untrusted.is_open:
        reasons = _reasons_now(group, number, work.limits)
        about = (step.tap, work.experiment_id, state.is_open, step.is_current, reasons, work.untrusted_after_s)
        judged.untrusted.append(UntrustedFinding(*about))


def _folded_trust(own: _TapSeconds, state: UntrustedState, from_us: int, until_us: int, after_s: float) -> UntrustedState:
    low, high = bisect_left(own.at_us, from_us), bisect_left(own.at_us, until_us)
    if high <= low:
        return state
    span = slice(low, high)
    shown = next(iter(own.by_quantity.values())).take(span)
    is_judged = np.ones(high - low, dtype=bool) if own.is_untrusted is None else ~own.is_untrusted[span]
    interval_s = 1.0 if own.interval_s is None else own.interval_s[span]
    return fold_untrusted(UntrustedRule(on_delay_s=after_s), state, replace(shown, is_judged=is_judged), interval_s)[0]


def _reasons_now(group: Group, number: int, limits: Sequence[LimitWork]) -> list[str]:
    """Why the newest sample is not trusted, in words."""
    last = int(group.ends[number]) - 1
    masks = [
        int(group.samples.reasons[quantity][last])
        for quantity in sorted(_watched_quantities(limits))
        if group.samples.trust[quantity][last] == Trust.UNTRUSTED
    ]
    return [reason.words for reason in reasons_in(int(np.bitwise_or.reduce(masks)))] if masks else []
