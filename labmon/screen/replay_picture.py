"""Past windows replayed from today's state, hanging from the limit line. Pure SVG text.

The line is the limit, down is towards the wanted state, on one scale in degrees. Windows that held are thin lines; those that
failed are heavier, with a mark where they crossed and the day they began. Across is in per cent, so that letters keep their size.
"""

import math
from collections.abc import Sequence
from html import escape

import numpy as np

from ingest.times import at_of
from labmon.clearance.ask import Course, LimitAnswer
from labmon.screen.present import NO_BREAK, age_text, count_text, number_text

LIMIT_PX, DEPTH_PX, OVER_PX = 62, 150, 18
HEIGHT_PX = LIMIT_PX + DEPTH_PX + 26
#: How much of the width a day's name takes on a narrow screen (330 px), per cent; and the heights it may stand at, px.
NAME_PERCENT, NAME_HEIGHTS_PX = 14.0, (LIMIT_PX - 24, LIMIT_PX - 38)
_WEEK = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")


def replay_picture(limit: LimitAnswer, length_s: float, spoken: str) -> str:
    """The picture; empty where there is nothing to replay."""
    if not limit.courses or not math.isfinite(limit.now_rad):
        return ""
    held, failed = ([one for one in limit.courses if one.has_failed is wanted] for wanted in (False, True))
    steps = len(limit.courses[0].angle_rad)
    lines = [_line(held, limit, "replay-held"), _line(failed, limit, "replay-failed")]
    return (
        f'<svg class="replay" role="img" aria-label="{escape(spoken)}" height="{HEIGHT_PX}">'
        f'<rect class="rail-under" x="0" width="100%" y="{LIMIT_PX - OVER_PX}" height="{OVER_PX}" fill="url(#hatch)"/>'
        f'<svg width="100%" height="{HEIGHT_PX}" viewBox="0 0 {steps} {HEIGHT_PX}" preserveAspectRatio="none">'
        f'{"".join(lines)}<path class="replay-limit" d="M0 {LIMIT_PX}H{steps}"/></svg>'
        f"{_names(failed, limit, length_s)}{_words(limit, length_s)}</svg>"
    )


def _y(angle_rad: float, limit: LimitAnswer) -> float:
    """Pixels from the top; further beyond than the margin above the line it runs along its edge."""
    return max(LIMIT_PX + (1.0 - angle_rad / limit.asked.limit_rad) * DEPTH_PX, LIMIT_PX - OVER_PX)


def _line(courses: Sequence[Course], limit: LimitAnswer, name: str) -> str:
    parts: list[str] = []
    for course in courses:
        is_down = False
        for step, angle_rad in enumerate(course.angle_rad.tolist()):
            if angle_rad != angle_rad:  # NaN differs from itself: not judged
                is_down = False
                continue
            parts.append(f"{'L' if is_down else 'M'}{step + 0.5:g} {_y(max(angle_rad, 0.0), limit):.0f}")
            is_down = True
    return f'<path class="{name}" d="{"".join(parts)}"/>' if parts else ""


def _names(failed: Sequence[Course], limit: LimitAnswer, length_s: float) -> str:
    """A mark where each failed window crossed, and the day it began where there is room."""
    crossed_us = {window.start_us: window.crossed_at_us - window.start_us for window in limit.clearance.failed}
    free_from = [-math.inf] * len(NAME_HEIGHTS_PX)
    drawn = []
    for course in sorted(failed, key=lambda one: crossed_us[one.start_us]):
        x = min(max(100.0 * crossed_us[course.start_us] / 1e6 / length_s, 1.0), 99.0)
        left = min(max(x - NAME_PERCENT / 2, 0.0), 100.0 - NAME_PERCENT)
        level = next((number for number, free in enumerate(free_from) if left >= free), None)
        drawn.append(f'<use class="replay-mark" href="#mark-below" x="{x:.1f}%" y="{LIMIT_PX - 9}"/>')
        if level is not None:
            free_from[level] = left + NAME_PERCENT
            drawn.append(f'<text x="{left + NAME_PERCENT / 2:.1f}%" y="{NAME_HEIGHTS_PX[level]}" text-anchor="middle">'
                         f"{escape(day_name(course.start_us))}</text>")
    return "".join(drawn)


def day_name(start_us: int) -> str:
    """``Tue 5 Mar``."""
    at = at_of(start_us)
    return f"{_WEEK[at.weekday()]} {at.day} {at:%b}"


def _words(limit: LimitAnswer, length_s: float) -> str:
    """Limit, today, wanted state, and the hours."""
    bottom = LIMIT_PX + DEPTH_PX
    now_px = min(max(_y(limit.now_rad, limit), LIMIT_PX + 12), bottom - 16)
    level = f"limit {number_text(math.degrees(limit.asked.limit_rad), 1, '°')}"
    ticks = "".join(
        f'<text x="{100 * share:.0f}%" y="{bottom + 20}" text-anchor="{anchor}">{escape(text)}</text>'
        for share, anchor, text in ((0.0, "start", "start"), (0.5, "middle", age_text(length_s / 2)),
                                    (1.0, "end", age_text(length_s))))
    return (
        f'<text class="replay-level" x="100%" y="{LIMIT_PX + 14}" text-anchor="end">{level}</text>'
        f'<text x="0" y="{bottom - 3}">wanted state</text>'
        f'<text class="replay-level" x="0" y="{now_px - 4:.0f}">now{NO_BREAK}{number_text(math.degrees(limit.now_rad), 1, "°")}'
        f"</text>{ticks}"
    )


def spoken_picture(limit: LimitAnswer, counted: str) -> str:
    """What the picture shows, in words."""
    worst = [float(np.nanmax(one.angle_rad)) for one in limit.courses if np.isfinite(one.angle_rad).any()]
    said = f"{count_text(len(limit.courses), 'past window')} replayed from now against the limit: {counted}."
    if worst:
        said += f" The largest angle of any is {number_text(math.degrees(max(worst)), 1, '°')}."
    return said
