"""The time to a limit in words."""

import math
from collections.abc import Sequence

from analysis.judge.derived import levels_deg
from analysis.judge.phases import Phase
from analysis.outlook.recent_drift import RecentDrift
from analysis.quantities import IntArray
from labmon.alarms.words import span_text


def outlook_aside(drift: RecentDrift, hosts: Sequence[Sequence[Phase]], end_us: IntArray) -> str:
    """``; 4.0° left, one in ten of the futures is there in 1 h 10``: empty where nothing is known."""
    if not len(end_us) or not drift.is_known[-1]:
        return ""
    left_deg = float(levels_deg(hosts, end_us[-1:])[0] - drift.angle_deg[-1])
    said = f"; {left_deg:.1f}° left"
    tenth_s = float(drift.tenth_s[-1])
    return said + (f", one in ten of the futures is there in {span_text(tenth_s)}" if math.isfinite(tenth_s) else "")
