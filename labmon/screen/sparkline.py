"""A row's own rail and the day's margin as one small SVG path, on one dB span for all benches. Pure.

Left part: a tick where a calm bench stands on its rail. Right part: the course of the margin, hanging from the limit
line. One path a row keeps 200 rows light; the lines behind it are the cell's background.
"""

from collections.abc import Sequence

from labmon.screen.rail import HIGH_DB, LOW_DB, x_percent

STEP = 0.25
HEIGHT = int((HIGH_DB - LOW_DB) / STEP)
POINTS, STEP_X = 24, 2  # one an hour
RAIL_WIDTH, COURSE_START = 57, 61
WIDTH = COURSE_START + POINTS * STEP_X
NO_TICK = "M0 0"


def y_of(margin_db: float) -> int:
    """Quarter dB from the top of the span; beyond the span it runs along the edge."""
    return round((HIGH_DB - min(max(margin_db, LOW_DB), HIGH_DB)) / STEP)


def tick_of(margin_db: float | None) -> str:
    """The tick of a calm bench on its rail; nothing visible without a margin."""
    return NO_TICK if margin_db is None else f"M{x_percent(margin_db) * RAIL_WIDTH / 100:.1f} 18v28"


def course_of(margins_db: Sequence[float | None]) -> str:
    """The newest ``POINTS`` equally spaced margins; a missing one breaks the line, a lone one is drawn as a dash."""
    shown = list(margins_db)[-POINTS:]
    parts: list[str] = []
    previous: int | None = None
    for index, margin_db in enumerate(shown, POINTS - len(shown)):
        if margin_db is None or margin_db != margin_db:  # NaN differs from itself
            previous = None
            continue
        x, y = COURSE_START + STEP_X * index, y_of(margin_db)
        parts.append(f"M{x} {y}h1" if previous is None else f"L{x} {y}" if parts[-1][0] == "M" else f"l{STEP_X} {y - previous}")
        previous = y
    return "".join(parts)
