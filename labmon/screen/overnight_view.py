"""A bench's night as a margin profile that hangs from its limit line. Pure."""

from dataclasses import dataclass
from html import escape
from zoneinfo import ZoneInfo

import numpy as np

from labmon.overnight.nights import Night
from labmon.overnight.queries import ENOUGH, BenchNight
from labmon.overnight.words import BenchWords, bench_words

LOW_DB, HIGH_DB = -4.0, 12.0
WIDTH, HEIGHT, LIMIT_Y = 840, 84, 21


@dataclass(frozen=True, slots=True)
class BenchView:
    """One bench's row."""

    words: BenchWords
    station: str
    experiment: str
    experiment_id: int
    profile: str


def bench_view(row: BenchNight, night: Night, zone: ZoneInfo) -> BenchView:
    """A bench's night with its drawing."""
    return BenchView(bench_words(row, night, zone), row.station, row.experiment, row.experiment_id, profile_svg(row, night, zone))


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
