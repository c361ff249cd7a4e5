"""Judging a chunk of taps: seconds of all of them in few array calls, then each limit's fold."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from analysis.judge.fold import EventKind
from analysis.judge.interval import intervals_s, steadied_s
from analysis.judge.rule import Quantity
from analysis.judge.seconds import Seconds, seconds_of_many
from analysis.judge.untrusted import UntrustedRule, UntrustedState, fold_untrusted
from analysis.quantities import BoolArray, FloatArray
from analysis.record.reduce_span import Group, ManyReduced
from analysis.reduce.trust import Trust, reasons_in
from ingest.models import TapKind
from ingest.store.columns import Readings
from labmon.alarms.models import Alarm, AlarmKind
from labmon.alarms.settle import Finding
from labmon.alarms.untrusted import UntrustedFinding
from labmon.pipeline.newest import newest_samples
from labmon.pipeline.phases import Episode, Standing, episodes_in, fold_through, phase_at
from labmon.pipeline.progress import Progress
from labmon.pipeline.work import LimitWork
from ingest.times import at_of


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
    """One tap's seconds by quantity, the nominal interval at each, and where one of them was untrusted."""

    by_quantity: Mapping[Quantity, Seconds]
    interval_s: FloatArray
    is_untrusted: BoolArray


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
    rows = list(Alarm.objects.select_for_update(of=("self",)).select_related("experiment")
                .filter(limit_id__in=forward, kind=AlarmKind.LIMIT, returned_at=None, is_withdrawn=False).order_by("pk"))
    if again:
        since = at_of(min(step.stretch.start_us for step in again.values()))
        past = Alarm.objects.select_for_update(of=("self",)).select_related("experiment").filter(limit_id__in=again, kind=AlarmKind.LIMIT)
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
    bounds = np.empty(0, dtype=np.int64)
    for quantity in sorted(wanted):
        whole[quantity], bounds = seconds_of_many(group.samples, quantity, group.first)
        starts = np.concatenate([[0], np.cumsum(whole[quantity].count)[:-1]])
        lost = np.logical_or.reduceat(group.samples.trust[quantity] == Trust.UNTRUSTED, starts)
        doubted[quantity] = lost & ~whole[quantity].is_judged
    ends = np.append(bounds[1:], len(next(iter(whole.values()))))
    found = []
    for step, begin, end in zip(members, bounds.tolist(), ends.tolist(), strict=True):
        span = slice(begin, end)
        own = {quantity: seconds.take(span) for quantity, seconds in whole.items()}
        watched = {Quantity(limit.limit.quantity) for limit in step.work.limits} or {Quantity.ER_DB}
        untrusted = np.logical_or.reduce([doubted[quantity][span] for quantity in watched]) if watched <= doubted.keys() else np.zeros(end - begin, dtype=bool)
        at_us = next(iter(own.values())).at_us
        found.append(_TapSeconds(own, _intervals(step, at_us), untrusted))
    return found


def _intervals(step: Progress, at_us: Any) -> FloatArray:
    """Nominal interval at each second: declared, else by the fold over all samples, steadied."""
    if step.tap.interval_s is not None:
        return np.full(len(at_us), step.tap.interval_s)
    samples_us = step.readings.at_us
    known = steadied_s(intervals_s(step.work.state.interval, samples_us))
    return known[np.searchsorted(samples_us, at_us)]


_NOTHING = _TapSeconds({}, np.empty(0), np.empty(0, dtype=bool))


def _empty(quantity: Quantity) -> Seconds:
    nothing, times = np.empty(0), np.empty(0, dtype=np.int64)
    never = np.empty(0, dtype=bool)
    return Seconds(quantity, 1.0, times, nothing, nothing, nothing, never, never, times)


def _judge_limit(step: Progress, limit: LimitWork, own: _TapSeconds, existing: list[Alarm], judged: Judged) -> None:
    quantity = Quantity(limit.limit.quantity)
    seconds = own.by_quantity.get(quantity) or _empty(quantity)
    before = limit.standing_or_start()
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
    episodes = episodes_in(found, before, seconds)
    if existing or _is_news(episodes):
        judged.findings.append(_finding(step, limit, episodes, existing))


def _is_news(episodes: Sequence[Episode]) -> bool:
    return bool(episodes)


def _finding(step: Progress, limit: LimitWork, episodes: Sequence[Episode], existing: list[Alarm]) -> Finding:
    return Finding(limit=limit.limit, tap=step.tap, phases=limit.phases, episodes=episodes, window_us=(step.stretch.start_us, step.stretch.end_us),
                   is_newest=step.stretch.is_newest, age_us=step.age_us, last_us=step.last_us, current_within_us=step.current_within_us, existing=existing)


def _judge_trust(step: Progress, own: _TapSeconds, group: Group, number: int, judged: Judged) -> None:
    """The untrusted-reading fold of a watched tap, over complete seconds that it has not seen."""
    work = step.work
    if work.untrusted_after_s is None or not own.by_quantity:
        return
    seconds = next(iter(own.by_quantity.values()))
    from_us = max(work.state.untrusted_upto_us or 0, step.stretch.start_us)
    low, high = np.searchsorted(seconds.at_us, [from_us, step.complete_us])
    state = work.state.untrusted
    if high > low:
        span = slice(int(low), int(high))
        shown = seconds.take(span)
        known = Seconds(shown.quantity, shown.entry_s, shown.at_us, shown.worst, shown.best_sure, shown.mean, ~own.is_untrusted[span],
                        shown.is_doubtful, shown.count)
        interval_s = float(np.nan_to_num(own.interval_s[int(high) - 1], nan=1.0))
        state, _ = fold_untrusted(UntrustedRule(on_delay_s=work.untrusted_after_s), state, known, interval_s)
    judged.untrusted_states[step.tap.pk] = (state, max(from_us, step.complete_us))
    judged.untrusted.append(UntrustedFinding(step.tap, work.experiment_id, state.is_open, step.is_current, _reasons_now(group, number, work.limits)))


def _reasons_now(group: Group, number: int, limits: Sequence[LimitWork]) -> list[str]:
    """Why the newest sample is not trusted, in words."""
    last = int(group.ends[number]) - 1
    quantities = {Quantity(limit.limit.quantity) for limit in limits} or {Quantity.ER_DB}
    masks = [int(group.samples.reasons[quantity][last]) for quantity in sorted(quantities) if group.samples.trust[quantity][last] == Trust.UNTRUSTED]
    return [reason.words for reason in reasons_in(int(np.bitwise_or.reduce(masks)))] if masks else []


