"""The lab as the page shows it: rows, rails and the sentence, made from bench rows. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from django.urls import reverse
from django.utils.safestring import SafeString, mark_safe

from labmon.benches.queries import BenchRow
from labmon.screen.course import margins_of
from labmon.screen.present import (
    MISSING,
    age_text,
    angle_text,
    dop_text,
    er_text,
    margin_db_text,
    margin_deg_text,
    power_text,
    temperature_text,
)
from labmon.screen.rail import Mark, axis, room_rail, shape_of, short_mark, x_percent
from labmon.screen.sparkline import course_of, tick_of
from labmon.screen.standing import Standing, lab_sentence, standing_of

ELSEWHERE = "No room"


@dataclass(frozen=True, slots=True, kw_only=True)
class LabRow:
    """One bench in words, with its mark."""

    station: str
    tap: str
    href: str
    standing: Standing
    value: str
    margin: str
    mark: Mark
    is_doubtful: bool
    is_waiting: bool
    heard_ms: int | None
    heard: str
    course: str
    why: str

    @property
    def own_mark(self) -> SafeString:
        """The mark on the bench's own rail, if it has a shape."""
        return mark_safe(short_mark(self.mark))

    @property
    def tick(self) -> str:
        """The tick that stands for a calm bench instead."""
        return tick_of(None if self.standing.has_shape else self.mark.margin_db)


@dataclass(frozen=True, slots=True, kw_only=True)
class LabPage:
    """Everything the lab page shows."""

    sentence: str
    rows: list[LabRow]
    rails: SafeString


def lab_view(benches: Sequence[BenchRow], now: datetime) -> LabPage:
    """The page of ``benches``, which come worst first, then by margin."""
    rows = [_row(bench, now) for bench in benches]
    sentence = lab_sentence(
        [row.standing for row in rows], thinnest=_thinnest(rows), unacknowledged=sum(bench.unacknowledged for bench in benches)
    )
    by_station = {bench.station: bench.room or ELSEWHERE for bench in benches}
    return LabPage(sentence=sentence, rows=rows, rails=_rails(rows, by_station))


def as_json(view: LabPage, *, with_course: bool) -> dict[str, Any]:
    """What lab.js patches into the page."""
    return {
        "sentence": view.sentence,
        "title": title_of(view),
        "rails": view.rails,
        "rows": [_row_json(row, with_course=with_course) for row in view.rows],
    }


def title_of(view: LabPage) -> str:
    """The sentence is the tab's title too."""
    return f"{view.sentence} labmon"


def _row(bench: BenchRow, now: datetime) -> LabRow:
    standing = standing_of(bench.state)
    is_stale = standing in {Standing.NO_READING, Standing.NEVER_HEARD}
    is_doubtful = (bench.trust == "doubtful" or is_stale) and bench.value is not None
    margin_db = None if is_stale else bench.margin_db
    href = reverse("station", args=[bench.station])
    label = "" if is_stale else margin_text(bench).replace(" · ", " ")
    mark = Mark(name=bench.station, href=href, standing=standing, margin_db=margin_db, label=label, is_doubtful=is_doubtful)
    age_s = None if bench.last_heard_at is None else (now - bench.last_heard_at).total_seconds()
    return LabRow(
        station=bench.station,
        tap=bench.tap or "",
        href=href,
        standing=standing,
        value=value_text(bench),
        margin=margin_text(bench),
        mark=mark,
        is_doubtful=is_doubtful,
        is_waiting=bench.unacknowledged > 0,
        heard_ms=None if bench.last_heard_at is None else int(bench.last_heard_at.timestamp() * 1000),
        heard=age_text(age_s),
        course=course_of(margins_of(bench)),
        why=", ".join(bench.reasons),
    )


def value_text(bench: BenchRow) -> str:
    """The judged value: ER with its bound sign; for taps without ER what they measure."""
    if bench.er_db is not None:
        sign = "≤" if bench.er_is_upper_bound else ""
        return f"{sign}{er_text(bench.er_db, is_lower_bound=bench.er_is_lower_bound)}"
    texts = {
        "angle_deg": lambda value: angle_text(value, is_upper_bound=bench.angle_is_upper_bound),
        "dop": dop_text,
        "power_w": power_text,
        "temperature_c": temperature_text,
    }
    return texts.get(bench.quantity or "", lambda _value: MISSING)(bench.value)


def margin_text(bench: BenchRow) -> str:
    """Both margins, degrees on the sphere first."""
    if bench.margin_db is None and bench.margin_deg is None:
        return MISSING
    return (
        f"{margin_deg_text(bench.margin_deg, is_bound=bench.margin_is_bound)} · "
        f"{margin_db_text(bench.margin_db, is_bound=bench.margin_is_bound)}"
    )


def _thinnest(rows: Sequence[LabRow]) -> str:
    inside = [row for row in rows if row.standing is Standing.WITHIN and row.mark.margin_db is not None]
    return f"{inside[0].station}, {inside[0].margin}" if inside else ""


def _rails(rows: Sequence[LabRow], room_of: dict[str, str]) -> SafeString:
    rooms: dict[str, list[Mark]] = {}
    for row in rows:
        rooms.setdefault(room_of[row.station], []).append(row.mark)
    order = sorted(rooms, key=lambda room: (room == ELSEWHERE, room))
    drawn = "".join(f"<h3>{_escaped(room)}</h3>{room_rail(room, rooms[room])}" for room in order)
    return mark_safe(f'{drawn}<span class="soft wide-only">margin</span>{axis()}')


def _escaped(text: str) -> str:
    from html import escape

    return escape(text)


def _row_json(row: LabRow, *, with_course: bool) -> dict[str, Any]:
    x = x_percent(row.mark.margin_db) if row.mark.margin_db is not None else 7.0
    facts = {
        "station": row.station,
        "word": row.standing.word,
        "standing": str(row.standing),
        "value": row.value,
        "margin": row.margin,
        "is_doubtful": row.is_doubtful,
        "is_waiting": row.is_waiting,
        "heard_ms": row.heard_ms,
        "shape": f"#{shape_of(row.standing, is_doubtful=row.is_doubtful)}" if row.standing.has_shape else None,
        "x": f"{x:.1f}%",
        "tick": row.tick,
    }
    return facts | ({"course": row.course} if with_course else {})
