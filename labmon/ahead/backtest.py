"""Warnings ahead of a limit replayed over the stored past, by the fold that judges live; each night, and when a rule is new."""

from dataclasses import asdict, dataclass
from typing import Any, Final

import numpy as np
from django.db import connection, transaction

from analysis.judge.derived import MINUTE_US, Minutes, drift_of, levels_deg, look_back_us, time_seconds, whole_bins
from analysis.judge.fold import Episode, FoldState, episodes_of, fold
from analysis.judge.phases import Phase
from analysis.judge.rule import LimitRule, Quantity
from analysis.outlook.warned import Warned, WarningScore, passings_us, score_warnings
from analysis.record.tap_minutes import minutes_of
from ingest.times import SECOND_US, at_of
from ingest.times import now_us as server_now_us
from labmon.ahead.models import AheadScore
from labmon.claims import claim_name
from labmon.experiments.models import Limit
from labmon.experiments.proposals import PROPOSALS
from labmon.experiments.rules import rule_of

DAY_US: Final = 86_400 * SECOND_US
LOOKED_BACK_US: Final = 30 * DAY_US
#: A score is made anew when it is a day old, or its rule has changed.
STALE_US: Final = DAY_US
AHEAD: Final = Quantity.TIME_TO_LIMIT_S


@dataclass(frozen=True, slots=True)
class Scored:
    """A score with the span that it rests on, µs."""

    from_us: int
    until_us: int
    score: WarningScore


def proposed_rule() -> LimitRule:
    """What is scored where no warning ahead is set: the form's proposal, an alarm below 1 h and a warning below 2 h."""
    proposal = PROPOSALS[AHEAD]
    return LimitRule(quantity=AHEAD, alarm=3600.0, warning=7200.0, on_delay_s=proposal.on_delay_s,
                     off_delay_s=proposal.off_delay_s, deadband=proposal.deadband or 0.0, window_s=proposal.window_s)


def back_test(minutes: Minutes, rule: LimitRule, level: Phase, from_us: int) -> Scored:
    """Score a rule against one level held over all of the past (today's: what was in force then is another question).

    Args:
        minutes: From `look_back_us` before ``from_us`` on.
    """
    whole = whole_bins(minutes, rule.window_s)
    seconds = time_seconds(*drift_of(whole, rule.window_s, [[level]]), rule.window_s, from_us)
    _, events = fold(rule, FoldState(), seconds, seconds.entry_s)
    warned = [Warned(one.raised_us, one.returned_us, _within_s(rule, one)) for one in episodes_of(events)]
    minute_us = minutes.from_us + np.arange(len(minutes)) * MINUTE_US
    angle_deg, inside = minutes.angle_deg(), minute_us >= from_us
    passed_us = passings_us(minute_us[inside], angle_deg[inside], levels_deg([[level]], minute_us[inside]))
    return Scored(from_us, minutes.until_us, score_warnings(warned, passed_us, minute_us[inside], np.isfinite(angle_deg[inside])))


def _within_s(rule: LimitRule, episode: Episode) -> float:
    """The level that it was raised at: what it said."""
    return rule.alarm if rule.warning is None or episode.alarm_us == episode.raised_us else rule.warning


def score_limits(now_us: int | None = None, *, most: int = 20) -> int:
    """Make the scores that are due, oldest first, at most ``most``; returns how many. Safe to run twice."""
    clock_us, made = server_now_us() if now_us is None else now_us, 0
    while made < most and _score_one(clock_us):
        made += 1
    return made


@transaction.atomic
def _score_one(now_us: int) -> bool:
    if not claim_name("ahead-scores"):
        return False
    due = _next_due(now_us)
    if due is None:
        return False
    limit, level, rule = due
    until_us = now_us // MINUTE_US * MINUTE_US
    from_us = until_us - LOOKED_BACK_US
    minutes = minutes_of({limit.tap_id: (from_us - 2 * look_back_us(AHEAD, rule.window_s), until_us)})[limit.tap_id]
    found = back_test(minutes, rule, level, from_us)
    known = np.flatnonzero(minutes.count > 0)
    first_us = max(from_us, minutes.from_us + int(known[0]) * MINUTE_US) if len(known) else until_us
    score = found.score
    AheadScore.objects.update_or_create(limit=limit, defaults={
        "made_at": at_of(now_us), "from_us": first_us, "until_us": until_us, "basis": basis_of(rule, level),
        "warnings": score.warnings, "came_true": score.came_true, "open_ended": score.open_ended, "passings": score.passings,
        "warned_of": score.warned_of, "median_lead_s": float(np.median(score.leads_s)) if len(score.leads_s) else None,
    })
    return True


def basis_of(rule: LimitRule, level: Phase) -> dict[str, Any]:
    """What a score was made with."""
    return asdict(rule) | {"quantity": rule.quantity.value, "toward": level.rule.alarm}


def _next_due(now_us: int) -> tuple[Limit, Phase, LimitRule] | None:
    """A limit on ER or angle in force whose score is missing, a day old, or of another rule; the longest waiting first."""
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT lim.id FROM labmon_limit lim LEFT JOIN labmon_aheadscore score ON score.limit_id = lim.id
            CROSS JOIN LATERAL (SELECT is_retired, alarm, valid_from FROM labmon_limitversion WHERE limit_id = lim.id
                                ORDER BY number DESC LIMIT 1) AS own
            LEFT JOIN LATERAL (SELECT version.valid_from, version.is_retired FROM labmon_limitversion version
                               JOIN labmon_limit trend ON trend.id = version.limit_id AND trend.quantity = %s
                                   AND trend.tap_id = lim.tap_id AND trend.experiment_id = lim.experiment_id
                               ORDER BY version.number DESC LIMIT 1) AS ahead ON true
            WHERE lim.quantity IN ('er_db', 'angle_deg') AND NOT own.is_retired
              AND (score.limit_id IS NULL OR score.made_at < to_timestamp(%s) OR (score.basis->>'toward')::float <> own.alarm
                   OR score.made_at < ahead.valid_from)
            ORDER BY score.made_at NULLS FIRST, lim.id LIMIT 1""",
            [AHEAD.value, (now_us - STALE_US) / 1e6],
        )
        row = cursor.fetchone()
    if row is None:
        return None
    limit = Limit.objects.select_related("tap").get(pk=row[0])
    own = limit.versions.order_by("-number")[0]
    trend = Limit.objects.filter(experiment_id=limit.experiment_id, tap_id=limit.tap_id, quantity=AHEAD).first()
    last = trend.versions.order_by("-number").first() if trend else None
    rule = proposed_rule() if last is None or last.is_retired else rule_of(last, AHEAD.value)
    return limit, Phase(own.pk, rule_of(own, limit.quantity), 0, 1 << 62), rule
