"""A trusted share or a time to the limit rehearsed: from one-minute cells alone, by the fold that judges them live."""

from collections.abc import Sequence

import numpy as np

from analysis.judge.derived import (
    MINUTE_US,
    Minutes,
    drift_of,
    levels_deg,
    look_back_us,
    share_seconds,
    time_seconds,
    whole_bins,
)
from analysis.judge.fold import Episode, FoldState, episodes_of, fold
from analysis.judge.phases import Phase
from analysis.judge.rehearsal import Call
from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import Seconds, Status, statuses
from analysis.outlook.warned import passings_us
from analysis.quantities import US_PER_S, IntArray
from analysis.record.tap_minutes import minutes_of
from ingest.models import Tap


def derived_calls(
    tap: Tap, rule: LimitRule, from_us: int, until_us: int, hosts: Sequence[Sequence[Phase]], hard: float | None
) -> list[Call]:
    """What a derived limit would have raised in a span of whole minutes; lead times to the limit run towards, or to ``hard``.

    Args:
        hosts: Phases of the limits on ER or angle that a time to the limit runs towards.
    """
    first_us = (from_us - 2 * look_back_us(rule.quantity, rule.window_s)) // MINUTE_US * MINUTE_US
    minutes = minutes_of({tap.pk: (first_us, until_us // MINUTE_US * MINUTE_US)})[tap.pk]
    seconds = _entries(minutes, rule, from_us, hosts)
    _, events = fold(rule, FoldState(), seconds, seconds.entry_s)
    hard_us = _hard_us(minutes, rule, seconds, hosts, hard)
    return [_call(one, hard_us) for one in episodes_of(events)]


def _entries(minutes: Minutes, rule: LimitRule, from_us: int, hosts: Sequence[Sequence[Phase]]) -> Seconds:
    if rule.quantity is Quantity.TRUSTED_SHARE:
        return share_seconds(minutes, rule.window_s, from_us)
    return time_seconds(*drift_of(whole_bins(minutes, rule.window_s), rule.window_s, hosts), rule.window_s, from_us)


def _hard_us(
    minutes: Minutes, rule: LimitRule, seconds: Seconds, hosts: Sequence[Sequence[Phase]], hard: float | None
) -> IntArray:
    """When the hard level was passed: of a time to the limit that limit itself, else a share."""
    if rule.quantity is Quantity.TIME_TO_LIMIT_S:
        minute_us = minutes.from_us + np.arange(len(minutes)) * MINUTE_US
        return passings_us(minute_us, minutes.angle_deg(), levels_deg(hosts, minute_us))
    return seconds.at_us[:0] if hard is None else seconds.at_us[statuses(seconds, hard) == Status.BELOW]


def _call(episode: Episode, hard_us: IntArray) -> Call:
    end_us = np.iinfo(np.int64).max if episode.returned_us is None else episode.returned_us
    inside = hard_us[(hard_us >= episode.began_us) & (hard_us <= end_us)]
    lead_s = float(inside[0] - episode.raised_us) / US_PER_S if len(inside) else None
    return Call(episode.raised_us, episode.returned_us, episode.alarm_us, lead_s)
