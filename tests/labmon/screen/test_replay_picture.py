"""The replayed nights as SVG: where lines run, what is named."""

import math
import re
from types import SimpleNamespace

import numpy as np

from labmon.clearance.ask import Course
from labmon.screen.replay_picture import DEPTH_PX, LIMIT_PX, OVER_PX, day_name, replay_picture, spoken_picture

#: Thursday 7 March 2024, 20:00 UTC.
THURSDAY_US = 1_709_841_600_000_000
HOUR_US = 3_600_000_000
LENGTH_S = 43_200.0


def limit_with(courses, failed=(), now_deg=3.0, limit_deg=10.0):
    windows = [SimpleNamespace(start_us=start_us, crossed_at_us=start_us + round(hours * HOUR_US)) for start_us, hours in failed]
    return SimpleNamespace(asked=SimpleNamespace(limit_rad=math.radians(limit_deg)), now_rad=math.radians(now_deg),
                           clearance=SimpleNamespace(failed=windows), courses=tuple(courses))


def course(angles_deg, start_us=THURSDAY_US, has_failed=False):
    return Course(start_us, np.radians(np.asarray(angles_deg, float)), has_failed)


def path_of(svg, name):
    return re.search(rf'class="{name}" d="([^"]*)"', svg).group(1)


def test_lines_hang_from_the_limit_on_one_scale():
    """At the limit on its line, at the wanted state at the bottom, half-way at half the limit; far beyond along the edge."""
    svg = replay_picture(limit_with([course([10.0, 5.0, 0.0, 40.0])]), LENGTH_S, "said")
    heights = [int(one.split()[1]) for one in re.findall(r"[ML]([\d.]+ \d+)", path_of(svg, "replay-held"))]
    assert heights == [LIMIT_PX, LIMIT_PX + DEPTH_PX // 2, LIMIT_PX + DEPTH_PX, LIMIT_PX - OVER_PX]
    assert 'role="img" aria-label="said"' in svg and "replay-failed" not in svg


def test_a_gap_breaks_the_line():
    svg = replay_picture(limit_with([course([1.0, math.nan, 1.0, 1.0])]), LENGTH_S, "")
    assert path_of(svg, "replay-held").count("M") == 2


def test_failed_windows_are_marked_and_named_where_there_is_room():
    """Three crossed after 6 h: three marks at the middle, two names above each other; a fourth at 1 h has room."""
    starts = [THURSDAY_US + day * 24 * HOUR_US for day in range(4)]
    failed = [(start_us, 6.0) for start_us in starts[:3]] + [(starts[3], 1.0)]
    svg = replay_picture(limit_with([course([12.0], start_us, True) for start_us in starts], failed), LENGTH_S, "")
    assert re.findall(r'#mark-below" x="([\d.]+)%"', svg) == ["8.3", "50.0", "50.0", "50.0"]
    assert [day for day in ("Thu 7 Mar", "Fri 8 Mar", "Sat 9 Mar", "Sun 10 Mar") if day in svg] == [
        "Thu 7 Mar", "Fri 8 Mar", "Sun 10 Mar"]


def test_nothing_to_draw():
    assert replay_picture(limit_with([]), LENGTH_S, "") == ""
    assert replay_picture(limit_with([course([1.0])], now_deg=math.nan), LENGTH_S, "") == ""


def test_words_for_who_does_not_see_it():
    said = spoken_picture(limit_with([course([1.0, 7.04]), course([2.0])]), "2 of 2 such nights held")
    assert said == ("2 past windows replayed from now against the limit: 2 of 2 such nights held. "
                    "The largest angle of any is 7.0°.")
    assert day_name(THURSDAY_US) == "Thu 7 Mar"
