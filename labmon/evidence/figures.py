"""Own SVG figures of a run: nothing but shapes and text, no script, no style, so that they look alike in page, PDF and paper.

Time is told by place, class by hatch and by word; colour only supports them.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from html import escape

import numpy as np

from ingest.times import at_of
from labmon.evidence.course import Course

WIDTH, LEFT, RIGHT = 960, 72, 16
PLOT = WIDTH - LEFT - RIGHT
INK, SOFT, LINE, BAND, BELOW = "#241d15", "#5f5547", "#cfc5b4", "#d9d1c2", "#a3161f"
FONT = "DejaVu Sans, Noto Sans, sans-serif"
STEPS_S = (600, 1800, 3600, 7200, 10_800, 14_400, 21_600, 43_200, 86_400, 172_800, 604_800)
CLASSES = ("below limit", "untrusted", "no reading", "good")
FILLS = {"good": BAND, "below limit": BELOW}
HATCHED = {"untrusted": "untrusted", "no reading": "no-reading"}
_SHORT = {"below limit": "below", "no reading": "no read."}
TOP, BOTTOM = 30, 258
_STEPS_DB = (1, 2, 5, 10, 20, 50)


@dataclass(frozen=True, slots=True)
class Span:
    """A stretch of one class, half-open, µs."""

    from_us: int
    until_us: int
    klass: str


@dataclass(frozen=True, slots=True)
class Level:
    """A limit line of the extinction ratio, dB, over a span, µs."""

    from_us: int
    until_us: int
    er_db: float


def ledger_figure(from_us: int, until_us: int, spans: Sequence[Span]) -> str:
    """A lane a class: where each second of the run lies."""
    height = 30 + 30 * len(CLASSES) + 38
    parts = []
    for number, klass in enumerate(CLASSES):
        y = 14 + 30 * number
        parts.append(_text(LEFT - 8, y + 15, _SHORT.get(klass, klass), anchor="end", size=11)
                     + f'<rect x="{LEFT}" y="{y}" width="{PLOT}" height="22" fill="none" stroke="{LINE}"/>')
        parts += [_block("ledger", span, from_us, until_us, y, 22) for span in spans if span.klass == klass]
    said = "Where each second of the run lies: good, below limit, untrusted, no reading."
    return _svg("ledger", height, said, [_axis(from_us, until_us, height - 44), *parts])


def course_figure(tap: str, course: Course, until_us: int, levels: Sequence[Level], spans: Sequence[Span]) -> str:
    """Extinction ratio of a tap: line of the mean leak in its band of least and most, limit, untrusted and missing time."""
    name, from_us = "course-" + tap.replace("/", "--"), course.from_us
    scale = _Scale.of(course, levels)
    parts = [_block(name, span, from_us, until_us, TOP, BOTTOM - TOP) for span in spans if span.klass in HATCHED]
    parts += [f'<path d="M{LEFT} {scale.y(value):.1f}h{PLOT}" stroke="{LINE}" stroke-width="0.5"/>'
              + _text(LEFT - 8, scale.y(value) + 4, f"{value:g}", anchor="end") for value in scale.ticks()]
    parts.append(_text(LEFT - 8, 18, "dB", anchor="end") + _text(
        LEFT, 18, f"extinction ratio of {tap}: mean leak in bins of {course.bin_us // 1_000_000} s, band from least to most",
        fill=SOFT))
    x = [LEFT + PLOT * (number * course.bin_us) / (until_us - from_us) for number in range(len(course.least_db) + 1)]
    parts += [_band(course, scale, x, run) for run in _runs(np.isfinite(course.least_db))]
    mean_db = course.mean_db
    for run in _runs(np.isfinite(mean_db)):
        points = "L".join(f"{0.5 * (x[one] + x[one + 1]):.1f} {scale.y(mean_db[one]):.1f}" for one in run)
        parts.append(f'<path d="M{points}{"h0.1" if len(run) == 1 else ""}" fill="none" stroke="{INK}" stroke-width="1.2"/>')
    parts += [_limit(level, scale, from_us, until_us) for level in levels]
    said = f"Extinction ratio of {tap} over the run, dB, with its limit; hatched: untrusted, dotted: no reading."
    return _svg(name, BOTTOM + 42, said, [_axis(from_us, until_us, BOTTOM), *parts])


@dataclass(frozen=True, slots=True)
class _Scale:
    """The dB axis of a course."""

    low: float
    high: float

    @classmethod
    def of(cls, course: Course, levels: Sequence[Level]) -> "_Scale":
        known = np.isfinite(course.least_db)
        edges = [level.er_db for level in levels]
        if known.any():
            edges += [float(course.least_db[known].min()), float(course.most_db[known].max())]
        low, high = min(edges, default=0.0), max(edges, default=30.0)
        spread = max(high - low, 4.0)
        return cls(float(np.floor(low - 0.08 * spread)), float(np.ceil(high + 0.05 * spread)))

    def y(self, er_db: float) -> float:
        return BOTTOM - (min(max(er_db, self.low), self.high) - self.low) / (self.high - self.low) * (BOTTOM - TOP)

    def ticks(self) -> list[int]:
        step = next(one for one in (*_STEPS_DB, 100) if (self.high - self.low) / one <= 8 or one == 100)
        return list(range(-(-int(self.low) // step) * step, int(self.high) + 1, step))


def _band(course: Course, scale: _Scale, x: Sequence[float], run: Sequence[int]) -> str:
    there = [f"{edge:.1f} {scale.y(course.most_db[one]):.1f}" for one in run for edge in (x[one], x[one + 1])]
    back = [f"{edge:.1f} {scale.y(course.least_db[one]):.1f}" for one in reversed(run) for edge in (x[one + 1], x[one])]
    return f'<path d="M{"L".join(there + back)}Z" fill="{BAND}"/>'


def _limit(level: Level, scale: _Scale, from_us: int, until_us: int) -> str:
    begin, end, y = _x(level.from_us, from_us, until_us), _x(level.until_us, from_us, until_us), scale.y(level.er_db)
    return (f'<path d="M{begin:.1f} {y:.1f}H{end:.1f}" stroke="{BELOW}" stroke-width="1.5" stroke-dasharray="7 3"/>'
            + _text(end - 4, y - 5, f"limit {level.er_db:.1f} dB", anchor="end", fill=BELOW))


def _block(name: str, span: Span, from_us: int, until_us: int, y: float, height: float) -> str:
    begin, end = (_x(moment, from_us, until_us) for moment in (span.from_us, span.until_us))
    fill = f"url(#{name}-{HATCHED[span.klass]})" if span.klass in HATCHED else FILLS[span.klass]
    return f'<rect x="{begin:.2f}" y="{y}" width="{max(end - begin, 0.75):.2f}" height="{height}" fill="{fill}"/>'


def _text(x: float, y: float, said: str, *, anchor: str = "start", size: int = 13, fill: str = INK) -> str:
    return (f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}" font-family="{FONT}" font-size="{size}" fill="{fill}">'
            f"{escape(said)}</text>")


def _x(moment_us: int, from_us: int, until_us: int) -> float:
    return LEFT + PLOT * min(max((moment_us - from_us) / (until_us - from_us), 0.0), 1.0)


def _axis(from_us: int, until_us: int, y: float) -> str:
    """Times in UTC below the plot, the date where it changes."""
    step_s = next((one for one in STEPS_S if (until_us - from_us) / 1e6 / one <= 9), STEPS_S[-1])
    step_us = step_s * 1_000_000
    marks, day = [], None
    for moment_us in range(-(-from_us // step_us) * step_us, until_us + 1, step_us):
        x, moment = _x(moment_us, from_us, until_us), at_of(moment_us)
        anchor = "end" if x > LEFT + PLOT - 30 else "middle"
        marks.append(f'<path d="M{x:.1f} {y}v5" stroke="{INK}"/>' + _text(x, y + 18, f"{moment:%H:%M}", anchor=anchor))
        if moment.date() != day:
            day = moment.date()
            marks.append(_text(x, y + 33, f"{moment:%Y-%m-%d} UTC", anchor="middle" if anchor == "middle" else "end", size=11,
                               fill=SOFT))
    return f'<path d="M{LEFT} {y}h{PLOT}" stroke="{INK}"/>{"".join(marks)}'


def _runs(is_there: np.ndarray) -> list[list[int]]:
    """Indices of stretches without a gap."""
    places = np.flatnonzero(is_there)
    return [part.tolist() for part in np.split(places, np.flatnonzero(np.diff(places) > 1) + 1) if len(part)]


def _svg(name: str, height: int, said: str, parts: Sequence[str]) -> str:
    square = ('<pattern id="{}" width="6" height="6" patternUnits="userSpaceOnUse"><rect width="6" height="6" fill="#fdfbf6"/>'
              "{}</pattern>")
    hatches = (square.format(f"{name}-untrusted", f'<path d="M0 6L6 0" stroke="{SOFT}" stroke-width="1"/>')
               + square.format(f"{name}-no-reading", f'<circle cx="3" cy="3" r="1" fill="{SOFT}"/>'))
    return (f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {WIDTH} {height}" width="{WIDTH}" height="{height}" '
            f'role="img" aria-label="{escape(said)}"><title>{escape(said)}</title><defs>{hatches}</defs>'
            f'<rect width="{WIDTH}" height="{height}" fill="#fdfbf6"/>{"".join(parts)}</svg>\n')
