"""A run as a margin profile: how far the worst reading of each step lay from the limit, hanging on the limit line. Pure SVG.

Where readings were untrusted the strip is hatched; where there was none its line is broken; seconds below the limit are a heavy
bar under the limit line. Colour only repeats what shape says.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from html import escape

import numpy as np

from analysis.judge.ledger import Intervals
from analysis.judge.ledger_tap import LedgerClass
from analysis.quantities import FloatArray

WIDTH, HEIGHT = 1000, 150
LOW_DB, HIGH_DB = -4.0, 12.0
STEPS = 500
_TOP, _BOTTOM = 8.0, 132.0


@dataclass(frozen=True, slots=True)
class Profile:
    """Margins, dB (signed, inside is plus), of evenly spaced steps over the run, shape (N,); NaN where there is none."""

    name: str
    margin_db: FloatArray


def classes_of_steps(intervals: Intervals, length_s: int, steps: int = STEPS) -> list[tuple[int, int, LedgerClass]]:
    """Stretches (first and behind-last step, class) to draw; of several classes in a step the worst stands."""
    count = max(min(steps, length_s), 1)
    worst = np.full(count, -1, np.int64)
    first = intervals.first_s * count // max(length_s, 1)
    last = -(-(intervals.first_s + intervals.length_s) * count // max(length_s, 1))
    for begin, end, klass in zip(first.tolist(), last.tolist(), intervals.klass.tolist(), strict=True):
        part = worst[begin:end]
        np.maximum(part, klass, out=part)
    edges = np.flatnonzero(np.diff(worst, prepend=-2))
    ends = np.append(edges[1:], count)
    return [
        (round(begin * steps / count), round(end * steps / count), LedgerClass(int(worst[begin])))
        for begin, end in zip(edges.tolist(), ends.tolist(), strict=True)
        if worst[begin] >= 0
    ]


def timeline(profile: Profile | None, intervals: Intervals, length_s: int, told: str) -> str:
    """The strip; ``told`` says the same in words."""
    parts = [_frame()]
    for begin, end, klass in classes_of_steps(intervals, length_s):
        x, width = begin * WIDTH / STEPS, max((end - begin) * WIDTH / STEPS, 1.5)
        parts.append(_MARKS[klass](x, width))
    if profile is not None:
        parts.append(_course(profile.margin_db))
    return (
        f'<svg class="run-line" role="img" aria-label="{escape(told)}" viewBox="0 0 {WIDTH} {HEIGHT}" '
        f'preserveAspectRatio="none" height="{HEIGHT}">{"".join(parts)}</svg>'
    )


def _y(margin_db: float) -> float:
    share = (min(max(margin_db, LOW_DB), HIGH_DB) - LOW_DB) / (HIGH_DB - LOW_DB)
    return _BOTTOM - share * (_BOTTOM - _TOP)


def _frame() -> str:
    rules = "".join(f"M0 {_y(db):.1f}H{WIDTH}" for db in (4.0, 8.0, 12.0))
    return f'<path class="run-rule" d="{rules}"/><path class="run-limit" d="M0 {_y(0.0):.1f}H{WIDTH}"/>'


def _good(x: float, width: float) -> str:
    return f'<path class="run-base" d="M{x:.1f} {_BOTTOM}h{width:.1f}"/>'


def _below(x: float, width: float) -> str:
    return f'<path class="run-below" d="M{x:.1f} {_y(0.0) + 8:.1f}h{width:.1f}"/>'


def _untrusted(x: float, width: float) -> str:
    size = f'x="{x:.1f}" y="{_TOP}" width="{width:.1f}" height="{_BOTTOM - _TOP}"'
    return f'<rect class="run-untrusted" {size} fill="url(#hatch)"/>'


def _no_reading(x: float, width: float) -> str:
    return f'<path class="run-gap" d="M{x:.1f} {_BOTTOM}h{width:.1f}M{x:.1f} {_TOP}V{_BOTTOM}M{x + width:.1f} {_TOP}V{_BOTTOM}"/>'


_MARKS = {
    LedgerClass.GOOD: _good,
    LedgerClass.BELOW: _below,
    LedgerClass.UNTRUSTED: _untrusted,
    LedgerClass.NO_READING: _no_reading,
}


def _course(margin_db: FloatArray) -> str:
    """The profile, broken where there is no value."""
    step = WIDTH / max(len(margin_db), 1)
    words, is_down = [], False
    for place, margin in enumerate(margin_db.tolist()):
        if not np.isfinite(margin):
            is_down = False
            continue
        words.append(f"{'L' if is_down else 'M'}{(place + 0.5) * step:.1f} {_y(margin):.1f}{'' if is_down else 'h.1'}")
        is_down = True
    return f'<path class="run-course" d="{"".join(words)}"/>' if words else ""


def spoken(counts: Sequence[tuple[str, str]]) -> str:
    """``12 h 00 good, 0 h 20 below limit``."""
    return ", ".join(f"{length} {word}" for word, length in counts)
