"""The day's margin as a small SVG path, on one dB span for all benches, hanging from the limit line. Pure."""

from collections.abc import Sequence

from labmon.screen.rail import HIGH_DB, LOW_DB

STEP = 0.25
HEIGHT = int((HIGH_DB - LOW_DB) / STEP)


def y_of(margin_db: float) -> int:
    """Quarter dB from the top of the span; beyond the span it runs along the edge."""
    return round((HIGH_DB - min(max(margin_db, LOW_DB), HIGH_DB)) / STEP)


def path_of(margins_db: Sequence[float | None]) -> str:
    """Path of equally spaced margins; a missing one breaks the line, a lone one is drawn as a dot."""
    parts: list[str] = []
    previous: int | None = None
    for index, margin_db in enumerate(margins_db):
        if margin_db is None or margin_db != margin_db:  # NaN differs from itself
            previous = None
            continue
        y = y_of(margin_db)
        if previous is None:
            parts.append(f"M{index} {y}h.5")
            parts.append(f"L{index} {y}")
        else:
            parts.append(f"l1 {y - previous}".replace(" -", "-"))
        previous = y
    return "".join(parts)


def sparkline(margins_db: Sequence[float | None]) -> str:
    """The SVG of a row; its limit line is the cell's background."""
    return (f'<svg class="spark" aria-hidden="true" viewBox="0 0 {max(len(margins_db), 1)} {HEIGHT}" preserveAspectRatio="none">'
            f'<path d="{path_of(margins_db)}"/></svg>')
