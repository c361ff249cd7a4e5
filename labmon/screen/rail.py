"""The margin rail: benches placed on one common margin scale, with the limit as a line. Pure SVG text.

Positions are per cent of the width, so the rail reflows while marks and letters keep their size. Left of the scale lies
the gutter, where benches without a reading stand.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from html import escape

from labmon.screen.standing import Standing

LOW_DB, HIGH_DB = -4.0, 12.0
GUTTER_PERCENT = 14.0
RAIL_HEIGHT_PX = 74
BASE_PX = 40
# How much of the width a name takes, per letter, on a wide and on a narrow screen (12 px letters; 900 and 330 px).
WIDE_LETTER_PERCENT, NARROW_LETTER_PERCENT = 0.82, 2.2


@dataclass(frozen=True, slots=True, kw_only=True)
class Mark:
    """A bench on the rail; ``margin_db`` None puts it into the gutter."""

    name: str
    href: str
    standing: Standing
    margin_db: float | None
    label: str = ""
    is_doubtful: bool = False


def x_percent(margin_db: float) -> float:
    """Where a margin stands, per cent of the width; beyond the scale it stands at the end."""
    share = (min(max(margin_db, LOW_DB), HIGH_DB) - LOW_DB) / (HIGH_DB - LOW_DB)
    return GUTTER_PERCENT + share * (100.0 - GUTTER_PERCENT - 1.0)


LIMIT_PERCENT = x_percent(0.0)


def shape_of(standing: Standing, *, is_doubtful: bool = False) -> str:
    """Name of the shape drawn for a standing; a doubtful value is drawn hollow."""
    return f"mark-{standing}{'-hollow' if is_doubtful and standing in {Standing.BELOW, Standing.THIN} else ''}"


def short_mark(mark: Mark) -> str:
    """The mark on a bench's own rail in its row; calm benches have a tick in the row's path instead (see sparkline)."""
    if not mark.standing.has_shape:
        return ""
    x = x_percent(mark.margin_db) if mark.margin_db is not None else GUTTER_PERCENT / 2
    shape = shape_of(mark.standing, is_doubtful=mark.is_doubtful)
    return f'<svg class="rail-own" aria-hidden="true"><use href="#{shape}" x="{x:.1f}%" y="13"/></svg>'


def room_rail(room: str, marks: Sequence[Mark]) -> str:
    """The rail of one room: grey ticks for benches within their limit, named marks for the others."""
    named = sorted((mark for mark in marks if mark.standing.wants_a_look), key=lambda mark: mark.standing.rank)
    placed = [mark for mark in named if mark.margin_db is not None and mark.standing is not Standing.NO_READING]
    parked = [mark for mark in named if mark.margin_db is None or mark.standing is Standing.NO_READING]
    ticks = [mark.margin_db for mark in marks if not mark.standing.wants_a_look and mark.margin_db is not None]
    return (
        f'<svg class="rail" role="group" aria-label="{escape(_spoken(room, marks))}" height="{RAIL_HEIGHT_PX}">'
        f"{_scale(ticks)}{_gutter(parked)}{_named_marks(placed)}</svg>"
    )


def own_rail(mark: Mark) -> str:
    """One tap's own rail for its page: the same scale, its mark or tick, and the axis under it."""
    parked = mark.margin_db is None or mark.standing is Standing.NO_READING
    ticks = [] if mark.standing.has_shape or mark.margin_db is None else [mark.margin_db]
    placed = [] if parked or not mark.standing.has_shape else [mark]
    gutter = _gutter([mark]) if parked and mark.standing.has_shape else ""
    return (
        f'<svg class="rail is-own" role="group" aria-label="{escape(_spoken(mark.name, [mark]))}" height="{RAIL_HEIGHT_PX + 14}">'
        f"{_scale(ticks)}{gutter}{_named_marks(placed)}{_axis_texts(RAIL_HEIGHT_PX + 8)}</svg>"
    )


def _spoken(room: str, marks: Sequence[Mark]) -> str:
    looks = [
        f"{mark.name} {mark.standing.word}" + (f" {mark.label}" if mark.label else "")
        for mark in marks
        if mark.standing.wants_a_look
    ]
    calm = len(marks) - len(looks)
    return f"{room}: " + "; ".join([*looks, f"{calm} as wanted"] if calm or not looks else looks)


def _scale(ticks_db: Sequence[float]) -> str:
    """Hatch below the limit, rail with engraved whole dB, limit line, and one tick for each calm bench."""
    rule = "".join(f"M{db} {BASE_PX}v{9 if db % 4 == 0 else 5}" for db in range(int(LOW_DB), int(HIGH_DB) + 1))
    calm = "".join(f"M{min(max(db, LOW_DB), HIGH_DB):.2f} {BASE_PX - 14}v13" for db in ticks_db)
    return (
        f'<rect class="rail-under" x="{GUTTER_PERCENT}%" width="{LIMIT_PERCENT - GUTTER_PERCENT:.2f}%" y="{BASE_PX - 22}" '
        'height="22" fill="url(#hatch)"/>'
        f'<svg x="{GUTTER_PERCENT}%" width="{100 - GUTTER_PERCENT - 1}%" height="{RAIL_HEIGHT_PX}" '
        f'viewBox="{LOW_DB:g} 0 {HIGH_DB - LOW_DB:g} {RAIL_HEIGHT_PX}" preserveAspectRatio="none" overflow="visible">'
        f'<path class="rail-line" d="M{LOW_DB:g} {BASE_PX}H{HIGH_DB:g}{rule}"/>'
        f'<path class="rail-limit" d="M0 {BASE_PX - 26}v38"/>'
        f'<path class="rail-calm" d="{calm}"/></svg>'
    )


def _gutter(parked: Sequence[Mark]) -> str:
    """Benches without a reading, left of the scale; more than two share one count."""
    drawn = "".join(
        f'<a href="{escape(mark.href)}" aria-label="{escape(mark.name)}, {mark.standing.word}">'
        f'<use href="#{shape_of(mark.standing)}" x="{2.2 + 4.0 * (index % 3):.1f}%" y="{BASE_PX - 7}"/></a>'
        for index, mark in enumerate(parked[:3])
    )
    if not parked:
        return ""
    words = (
        parked[0].name
        if len(parked) == 1
        else f"{len(parked)} silent"
        if all(mark.standing is Standing.NO_READING for mark in parked)
        else f"{len(parked)} unplaced"
    )
    return f'<g class="rail-gutter">{drawn}<text x="0" y="{BASE_PX - 20}">{escape(words)}</text></g>'


def _named_marks(placed: Sequence[Mark]) -> str:
    """Marks on the rail; names on two levels above and one below, left out where they would overlap."""
    wide: list[list[tuple[float, float]]] = [[], [], []]
    narrow: list[list[tuple[float, float]]] = [[], [], []]
    heights = (BASE_PX - 20, BASE_PX + 25, BASE_PX - 33)
    drawn = []
    for mark in placed:
        x = x_percent(mark.margin_db or 0.0)
        text = f"{mark.name} {mark.label}".strip()
        anchor = "end" if x > 88 else "start" if x < 24 else "middle"
        level = _free_level(wide, x, len(text) * WIDE_LETTER_PERCENT, anchor)
        fits_narrow = level is not None and _takes(narrow[level], x, len(text) * NARROW_LETTER_PERCENT, anchor)
        name = (
            ""
            if level is None
            else (
                f'<text class="{"" if fits_narrow else "wide-only"}" x="{x:.1f}%" y="{heights[level]}" '
                f'text-anchor="{anchor}">{escape(text)}</text>'
            )
        )
        drawn.append(
            f'<a class="rail-{mark.standing}" href="{escape(mark.href)}" aria-label="{escape(text)}, {mark.standing.word}">'
            f'<use href="#{shape_of(mark.standing, is_doubtful=mark.is_doubtful)}" x="{x:.1f}%" y="{BASE_PX - 7}"/>{name}</a>'
        )
    return "".join(reversed(drawn))


def _free_level(levels: list[list[tuple[float, float]]], x: float, width: float, anchor: str) -> int | None:
    """The first level with room for a name, which is then taken."""
    return next((index for index, taken in enumerate(levels) if _takes(taken, x, width, anchor)), None)


def _takes(taken: list[tuple[float, float]], x: float, width: float, anchor: str) -> bool:
    start = {"middle": x - width / 2, "start": x, "end": x - width}[anchor]
    end = start + width
    if any(start < other_end and end > other_start for other_start, other_end in taken):
        return False
    taken.append((start, end))
    return True


def axis() -> str:
    """The scale under the rails, in words and dB."""
    return f'<svg class="rail-axis" aria-hidden="true" height="20">{_axis_texts(14)}</svg>'


def _axis_texts(y: int) -> str:
    marks = [(db, f"{'+' if db > 0 else '−' if db < 0 else ''}{abs(db)}") for db in (-4, 4, 8)]
    texts = "".join(f'<text x="{x_percent(db):.2f}%" y="{y}" text-anchor="middle">{text}</text>' for db, text in marks)
    return (
        f'<text x="0" y="{y}" class="wide-only">no reading</text>{texts}'
        f'<text class="rail-axis-limit" x="{LIMIT_PERCENT:.2f}%" y="{y}" text-anchor="middle">limit</text>'
        f'<text x="99%" y="{y}" text-anchor="end">+{HIGH_DB:g} dB</text>'
    )
