"""Warnings ahead in words: when the light may reach its limit, and how often such warnings came true. Pure."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

from analysis.outlook.binomial import proportion_interval
from ingest.times import SECOND_US, at_of
from labmon.ahead.models import AheadScore, LimitOutlook
from labmon.ahead.queries import Ahead
from labmon.alarms.models import Alarm
from labmon.experiments.queries import LimitFacts
from labmon.screen.present import age_text, angle_text, count_text, time_text

#: An outlook whose drift ended longer ago says nothing of now.
OLD_S = 1200.0


@dataclass(frozen=True, slots=True, kw_only=True)
class WarningView:
    """A warning ahead that stands or was withdrawn of late."""

    tap: str
    station: str
    words: str
    score: str
    is_open: bool


def outlook_words(outlook: LimitOutlook | None, now: datetime) -> str:
    """E.g. ``Recent drift (3 h) reaches the limit in about 1 h 50; one in ten of the futures sooner than 1 h 10; 4.0° left.``"""
    if outlook is None:
        return ""
    ended = at_of(outlook.at_us)
    if (now - ended).total_seconds() > OLD_S:
        return f"Time to the limit: last told at {time_text(ended)[:16]} UTC; since then nothing was read."
    over = f"Recent drift ({age_text(outlook.window_s)})"
    if outlook.said == "unknown" or outlook.angle_deg is None:
        return f"Time to the limit: not enough was read in the last {age_text(outlook.window_s)}."
    if outlook.said == "beyond":
        return "The light is beyond its limit now."
    left = f"{angle_text(outlook.limit_deg - outlook.angle_deg)} left"
    passed_s = (now - ended).total_seconds()
    median, tenth = (None if one is None else age_text(max(one - passed_s, 0)) for one in (outlook.median_s, outlook.tenth_s))
    if median is not None:
        return f"{over} reaches the limit in about {median}; one in ten of the futures sooner than {tenth}; {left}."
    if tenth is not None:
        return f"{over}: one in ten of the futures reaches the limit within {tenth}, half of them later than the window; {left}."
    how = "turns back to its mean, well inside" if outlook.turns_back else "does not reach the limit"
    return f"{over} {how}: not within {age_text(outlook.window_s)} even for one in ten of the futures; {left}."


def score_words(score: AheadScore | None) -> str:
    """E.g. ``Back-tested over 30 d: 9 warnings below 2 h, 6 came true, 3 false calls (33 %, 95 % interval 7 to 70 %) …``"""
    if score is None:
        return "Warnings ahead are back-tested on the stored past within a day."
    span = age_text((score.until_us - score.from_us) / SECOND_US)
    level = score.basis.get("warning") or score.basis["alarm"]
    said = f"Back-tested over {span}: {count_text(score.warnings, 'warning')} below {age_text(level)}"
    if score.warnings:
        false = score.warnings - score.came_true
        low, high = proportion_interval(false, score.warnings)
        said += (f", {score.came_true} came true, {count_text(false, 'false call')} ({100 * false / score.warnings:.0f} %, "
                 f"95 % interval {100 * float(low):.0f} to {100 * float(high):.0f} %)")
    said += f"; {score.warned_of} of {count_text(score.passings, 'passing')} of the limit warned of"
    if score.median_lead_s is not None:
        said += f", half of them at least {age_text(score.median_lead_s)} before"
    return said + (f"; {score.open_ended} of unknown outcome." if score.open_ended else ".")


def ahead_words(limits: Sequence[LimitFacts], ahead: Mapping[int, Ahead], now: datetime) -> list[tuple[str, str]]:
    """Outlook and back-test of each limit on ER or angle in force."""
    hosts = [limit for limit in limits if limit.quantity in ("er_db", "angle_deg") and not limit.is_retired]
    found = [ahead[limit.limit_id] for limit in hosts if limit.limit_id in ahead]
    return [(outlook_words(one.outlook, now), score_words(one.score)) for one in found if one.outlook is not None]


def warning_views(alarms: Sequence[tuple[Alarm, AheadScore | None]], now: datetime) -> list[WarningView]:
    """Warnings ahead for the lab page."""
    views = []
    for alarm, score in alarms:
        tap = f"{alarm.tap.station.name}/{alarm.tap.name}"
        is_open = alarm.returned_at is None and not alarm.is_withdrawn
        said_at = time_text(alarm.raised_at)[11:16]
        words = f"{alarm.message.removeprefix(f'{tap}: ')}; said at {said_at} UTC"
        if not is_open:
            words = f"warning of {said_at} UTC withdrawn at {time_text(alarm.returned_at or now)[11:16]} UTC: it no longer holds"
        views.append(WarningView(tap=tap, station=alarm.tap.station.name, words=words, score=_short(score), is_open=is_open))
    return views


def _short(score: AheadScore | None) -> str:
    """``Of 9 such warnings in 30 d, 3 were false calls.``"""
    if score is None or not score.warnings:
        return "No such warning in the stored past to judge it by."
    span = age_text((score.until_us - score.from_us) / SECOND_US)
    return f"Of {count_text(score.warnings, 'such warning')} in {span}, {score.warnings - score.came_true} were false calls."


def shown_since(now: datetime) -> datetime:
    """Withdrawn warnings stay on the lab page for so long."""
    return now - timedelta(hours=2)
