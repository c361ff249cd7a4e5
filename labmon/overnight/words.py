"""A night in words: the first sentence, and a line a bench; the page and the morning's mail say the same."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np

from labmon.alarms.models import Alarm
from labmon.overnight.nights import Night
from labmon.overnight.queries import BUCKET_S, BenchNight

FEW = 4
HOUR_BUCKETS = 3600 // BUCKET_S
MINUS, NO_BREAK = "\N{MINUS SIGN}", "\N{NO-BREAK SPACE}"


@dataclass(frozen=True, slots=True)
class BenchWords:
    """One bench's night; what there is nothing to say of is empty."""

    name: str
    worst: str
    word: str
    is_below: bool
    usual: str
    drift: str
    calls: list[str]
    untrusted: str
    missing: str


def night_sentence(night: Night, rows: Sequence[BenchNight]) -> str:
    """``Two of 24 benches fell below their limit in the night to 5 March 2031: bench-a, bench-b.``"""
    when = f"in the night to {night.date + timedelta(days=1):%-d %B %Y}"
    if not rows:
        return f"No bench had a limit {when}."
    below = [row for row in rows if row.worst_db is not None and row.worst_db < 0.0]
    silent = sum(row.worst_db is None for row in rows)
    of = f"{len(rows)} bench{'es' if len(rows) != 1 else ''}"
    said = f"None of {of} fell below its limit {when}" if not below else (
        f"{len(below)} of {of} fell below {'its' if len(below) == 1 else 'their'} limit {when}: {_names(below)}")
    return said + (f"; {silent} had no judged reading." if silent else ".")


def _names(rows: Sequence[BenchNight]) -> str:
    names = [f"{row.station}/{row.tap}" for row in rows]
    return ", ".join(names[:FEW]) + (f" and {len(names) - FEW} more" if len(names) > FEW else "")


def bench_words(row: BenchNight, night: Night, zone: ZoneInfo) -> BenchWords:
    """What a bench's night came to."""
    worst = row.worst_db
    is_below = worst is not None and worst < 0.0
    at = "" if row.worst_bucket is None else f" about {clock(_bucket_at(night, row.worst_bucket), zone)}"
    usual = "" if row.usual_db is None or row.usual_low_db is None else (
        f"usual worst {margin_text(row.usual_db)}, least {margin_text(row.usual_low_db)} in {row.usual_nights} nights")
    covered_s, trusted_s = float(row.covered.sum()) * BUCKET_S, float(row.trusted.sum()) * BUCKET_S
    whole_s = (night.until_us - night.from_us) / 1e6
    return BenchWords(
        f"{row.station}/{row.tap}",
        "" if worst is None else f"{margin_text(worst)}{at}",
        "no judged reading" if worst is None else "below limit" if is_below else "", is_below, usual,
        _drift(row), [_call(one, zone) for one in row.alarms], _share(max(covered_s - trusted_s, 0.0), whole_s, "untrusted"),
        _share(max(whole_s - covered_s, 0.0), whole_s, "missing"))


def _drift(row: BenchNight) -> str:
    """Mean angle of the first and the last hour with readings, and how far apart two tens of minutes were at most."""
    angle_deg = row.mean_angle_deg[np.isfinite(row.mean_angle_deg)]
    if len(angle_deg) < 2 * HOUR_BUCKETS:
        return ""
    first, last = angle_deg[:HOUR_BUCKETS].mean(), angle_deg[-HOUR_BUCKETS:].mean()
    return f"angle {first:.1f}° in the first hour, {last:.1f}° in the last, {np.ptp(angle_deg):.1f}° between its extremes"


def margin_text(margin_db: float) -> str:
    """Margin to the alarm level, signed: inside is plus."""
    rounded = round(margin_db, 1) + 0.0
    sign = MINUS if rounded < 0.0 else "+" if rounded > 0.0 else ""
    return f"{sign}{abs(rounded):.1f}{NO_BREAK}dB"


def _call(alarm: Alarm, zone: ZoneInfo) -> str:
    cause = f", {alarm.cause}" if alarm.cause else ""
    what = {"no-reading": "no reading", "untrusted": "untrusted"}.get(alarm.kind, alarm.level)
    back = f" to {clock(alarm.returned_at, zone)}" if alarm.returned_at else ", still open"
    return f"{what} {clock(alarm.raised_at, zone)}{back}{cause}"


def _share(part_s: float, whole_s: float, word: str) -> str:
    share = part_s / whole_s
    return f"{max(100 * share, 1):.0f} % {word}" if share >= 0.005 else ""


def clock(at: datetime, zone: ZoneInfo) -> str:
    """Hours and minutes of the lab's clock."""
    return f"{at.astimezone(zone):%H:%M}"


def _bucket_at(night: Night, bucket: int) -> datetime:
    first_us = night.from_us // (BUCKET_S * 1_000_000) * BUCKET_S * 1_000_000
    return night.from_at + timedelta(microseconds=first_us - night.from_us + bucket * BUCKET_S * 1_000_000)
