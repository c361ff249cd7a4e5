"""A night in words and shapes: the first sentence, and a margin profile that hangs from its limit line. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from html import escape
from zoneinfo import ZoneInfo

import numpy as np

from labmon.overnight.nights import Night
from labmon.overnight.queries import BUCKET_S, ENOUGH, BenchNight
from labmon.screen.present import margin_db_text

LOW_DB, HIGH_DB = -4.0, 12.0
WIDTH, HEIGHT, LIMIT_Y = 840, 84, 21
FEW = 4


@dataclass(frozen=True, slots=True)
class BenchView:
    """One bench's row."""

    name: str
    station: str
    experiment: str
    experiment_id: int
    worst: str
    word: str
    is_below: bool
    usual: str
    calls: list[str]
    untrusted: str
    missing: str
    profile: str


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


def bench_view(row: BenchNight, night: Night, zone: ZoneInfo) -> BenchView:
    """A bench's night in words."""
    worst = row.worst_db
    is_below = worst is not None and worst < 0.0
    at = "" if row.worst_bucket is None else f" about {clock(_bucket_at(night, row.worst_bucket), zone)}"
    usual = "" if row.usual_db is None else (
        f"usual worst {margin_db_text(row.usual_db)}, least {margin_db_text(row.usual_low_db)} in {row.usual_nights} nights")
    covered_s, trusted_s = float(row.covered.sum()) * BUCKET_S, float(row.trusted.sum()) * BUCKET_S
    whole_s = (night.until_us - night.from_us) / 1e6
    return BenchView(
        f"{row.station}/{row.tap}", row.station, row.experiment, row.experiment_id,
        "" if worst is None else f"{margin_db_text(worst)}{at}",
        "no judged reading" if worst is None else "below limit" if is_below else "", is_below, usual,
        [_call(one, zone) for one in row.alarms], _share(max(covered_s - trusted_s, 0.0), whole_s, "untrusted"),
        _share(max(whole_s - covered_s, 0.0), whole_s, "missing"), profile_svg(row, night, zone))


def _call(alarm, zone: ZoneInfo) -> str:
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


def profile_svg(row: BenchNight, night: Night, zone: ZoneInfo) -> str:
    """The night's margins on one scale for all benches, down from the limit line on top: the lower, the more margin.

    Full line: trusted; dashed: mostly untrusted; hatched: no readings. What passes the line is below the limit.
    """
    count = len(row.least_db)
    step = WIDTH / count
    known = np.isfinite(row.mean_db)
    parts = [f'<path class="night-limit" d="M0 {LIMIT_Y}H{WIDTH}"/>']
    parts += [f'<rect class="night-gap" x="{begin * step:.1f}" y="0" width="{(end - begin) * step:.1f}" height="{HEIGHT}"/>'
              for begin, end in _runs(row.covered < ENOUGH)]
    parts += [f'<path class="night-band" d="{_band(row, step, begin, end)}"/>'
              for begin, end in _runs(np.isfinite(row.least_db) & known)]
    doubted = known & (row.trusted < ENOUGH)
    parts += [f'<path class="night-line" d="{_line(row, step, begin, end)}"/>' for begin, end in _runs(known & ~doubted)]
    parts += [f'<path class="night-line is-untrusted" d="{_line(row, step, begin, end)}"/>' for begin, end in _runs(doubted)]
    below = np.isfinite(row.least_db) & (row.least_db < 0.0)
    parts += [f'<rect class="night-below" x="{begin * step:.1f}" y="0" width="{max((end - begin) * step, 3):.1f}" height="6"/>'
              for begin, end in _runs(below)]
    parts += [f'<path class="night-hour" d="M{WIDTH * share:.1f} {HEIGHT}v-5"/>' for share in _hour_shares(night)]
    said = f"Margin of {row.station}/{row.tap} over the night, hanging from its limit"
    return (f'<svg class="night" viewBox="0 0 {WIDTH} {HEIGHT}" preserveAspectRatio="none" role="img" '
            f'aria-label="{escape(said)}">'
            f'{"".join(parts)}</svg>')


def _y(margin_db: float) -> float:
    return LIMIT_Y + min(max(margin_db, LOW_DB), HIGH_DB) / HIGH_DB * (HEIGHT - LIMIT_Y - 4)


def _line(row: BenchNight, step: float, begin: int, end: int) -> str:
    points = [f"{begin * step:.1f} {_y(row.mean_db[begin]):.1f}"]
    points += [f"{(one + 0.5) * step:.1f} {_y(row.mean_db[one]):.1f}" for one in range(begin, end)]
    return "M" + "L".join([*points, f"{end * step:.1f} {_y(row.mean_db[end - 1]):.1f}"])


def _band(row: BenchNight, step: float, begin: int, end: int) -> str:
    there = [f"{edge * step:.1f} {_y(row.least_db[one]):.1f}" for one in range(begin, end) for edge in (one, one + 1)]
    return f"M{begin * step:.1f} {LIMIT_Y}L{'L'.join(there)}L{end * step:.1f} {LIMIT_Y}Z"


def _runs(is_there: np.ndarray) -> list[tuple[int, int]]:
    edges = np.flatnonzero(np.diff(np.concatenate([[0], is_there.astype(np.int8), [0]])))
    return list(zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True))


def _hour_shares(night: Night) -> list[float]:
    """Whole hours of the night as shares of its width."""
    whole_us, hour_us = night.until_us - night.from_us, 3_600_000_000
    first_us = -(-night.from_us // hour_us) * hour_us
    return [(moment - night.from_us) / whole_us for moment in range(first_us, night.until_us, hour_us)]
