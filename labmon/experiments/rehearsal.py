"""A proposed limit tried on the stored past before it is saved. Writes nothing."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from analysis.judge.phases import Phase, phases_of
from analysis.judge.rehearsal import Call, rehearse
from analysis.judge.rule import Quantity
from analysis.judge.seconds import Seconds, seconds_of
from analysis.record.reduce_span import find_samples
from analysis.record.rollups import history
from ingest.models import Tap
from ingest.times import SECOND_US, at_of, us_of
from labmon.benches.pace import interval_of
from labmon.errors import WriteError
from labmon.experiments.derived_rehearsal import derived_calls
from labmon.experiments.models import Experiment, Limit
from labmon.experiments.rules import LimitWish, checked_quantity, checked_wish, rule_of

LONGEST_US: Final = 31 * 86_400 * SECOND_US
CELL_US: Final = 60 * SECOND_US
#: The newest time may not be rolled up yet: it is always looked at in full.
RECENT_US: Final = 1800 * SECOND_US
#: Night, for counting calls that wake someone: 22:00 to 06:00 UTC (common practice, no source).
NIGHT_FROM_H, NIGHT_UNTIL_H = 22, 6


@dataclass(frozen=True, slots=True)
class Rehearsed:
    """What a limit would have done over a span; ``calls`` in order of time, ``at_night``: how many began at night.

    Attributes:
        longest_s: The longest of those that returned; ``open_s``: all together, those still open up to the span's end.
        read_share: Share of the span that had to be folded from raw readings.
    """

    from_us: int
    until_us: int
    calls: list[Call]
    at_night: int
    longest_s: float | None
    open_s: float
    read_share: float


def rehearse_limit(
    tap: Tap, quantity: str, wish: LimitWish, from_us: int, until_us: int, now_us: int, *, hard: float | None = None,
    hosts: Sequence[Sequence[Phase]] = (),
) -> Rehearsed:
    """Replay a wish over a half-open span with the fold that judges live.

    Args:
        hosts: What a time to the limit runs towards; see `hosts_of`.
    Raises:
        WriteError: A field cannot be meant, or the span is empty or longer than 31 days.
    """
    named = checked_quantity(quantity, tap)
    rule = checked_wish(named, wish)
    begin_us, end_us = from_us // CELL_US * CELL_US, min(until_us, now_us) // SECOND_US * SECOND_US
    if not 0 < end_us - begin_us <= LONGEST_US:
        raise WriteError("span", "It holds no past, or more than 31 days of it.", "Choose up to 31 days that have begun.")
    if named.is_derived:
        return _summed(derived_calls(tap, rule, begin_us, end_us, hosts, hard), begin_us, end_us, 0.0)
    curves = history(tap.pk, named.value, begin_us, end_us, -(-(end_us - begin_us) // CELL_US))
    worst = (curves.max if named.is_bad_above else curves.min).copy()
    cell_us = round(curves.bucket_s * SECOND_US)
    worst[curves.at_us + cell_us > now_us - RECENT_US] = np.inf if named.is_bad_above else -np.inf

    def seconds_of_span(start_us: int, stop_us: int) -> Seconds:
        samples, _ = find_samples(tap, start_us, stop_us)
        return seconds_of(samples, named)

    found = rehearse(rule, curves.at_us, worst, cell_us, end_us, seconds_of_span, interval_s=interval_of(tap), hard=hard)
    return _summed(found.calls, begin_us, end_us, found.read_us / (end_us - begin_us))


def hosts_of(experiment: Experiment, tap: Tap) -> list[list[Phase]]:
    """Phases of the limits on ER or angle of a tap: what a time to the limit runs towards; one query and one more."""
    limits = Limit.objects.filter(experiment=experiment, tap=tap, quantity__in=[Quantity.ER_DB, Quantity.ANGLE_DEG])
    return [
        phases_of([(one.pk, rule_of(one, limit.quantity), us_of(one.valid_from), one.is_retired, one.in_runs_only)
                   for one in sorted(limit.versions.all(), key=lambda version: version.number)])
        for limit in limits.prefetch_related("versions")
    ]


def present_hosts(experiment: Experiment, tap: Tap) -> list[list[Phase]]:
    """The same, today's levels held over all of the past."""
    newest = [phases[-1] for phases in hosts_of(experiment, tap) if phases and not phases[-1].is_retired]
    return [[replace(phase, from_us=0)] for phase in newest]


def _summed(calls: list[Call], begin_us: int, end_us: int, read_share: float) -> Rehearsed:
    lasted = [((call.returned_us or end_us) - call.raised_us) / SECOND_US for call in calls]
    returned = [one for one, call in zip(lasted, calls, strict=True) if call.returned_us is not None]
    return Rehearsed(
        begin_us,
        end_us,
        calls,
        sum(_is_at_night(call.raised_us) for call in calls),
        max(returned, default=None),
        sum(lasted),
        read_share,
    )


def _is_at_night(at_us: int) -> bool:
    hour = at_of(at_us).hour
    return hour >= NIGHT_FROM_H or hour < NIGHT_UNTIL_H
