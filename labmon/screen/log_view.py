"""Entries of the logbook in words. Pure."""

from dataclasses import dataclass
from datetime import datetime

from labmon.logbook.models import ChangeKind, ConfigurationChange, LogEntry, LogTag
from labmon.logbook.queries import LogMark, standing_kind
from labmon.screen.present import count_text, time_text

TAG_WORDS = {
    LogTag.NOTE: "note",
    LogTag.TOUCHED: "fibre touched",
    LogTag.CLEANED: "connector cleaned",
    LogTag.MEASURED: "measured by hand",
    LogTag.FAULT: "fault seen",
    LogTag.REPAIR: "repaired",
}
CHANGE_WORDS = {
    ChangeKind.FIBRE: "fibre laid anew",
    ChangeKind.JOINT: "connector or splice",
    ChangeKind.LASER: "laser",
    ChangeKind.OPTICS: "other optics",
    ChangeKind.TAP: "tap or detector",
    ChangeKind.GAIN: "gain or electronics",
    ChangeKind.OTHER: "something else",
}
_SHORT = 60


@dataclass(frozen=True, slots=True, kw_only=True)
class EntryView:
    """One entry as a page shows it; ``asks`` while nobody has said whether it was a configuration change."""

    id: int
    station: str
    when: str
    tag: str
    text: str
    tap: str
    run: str
    run_id: int | None
    by: str
    change: str
    edits: int
    is_struck: bool
    has_picture: bool
    asks: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class MarkView:
    """A mark on a plot and its line in the list beside."""

    at_ms: float
    until_ms: float | None
    word: str
    when: str
    text: str
    is_change: bool
    station: str
    entry_id: int | None


def entry_view(entry: LogEntry, *, by: str, may_answer: bool) -> EntryView:
    """``by`` is how the reader may know its author."""
    kind = standing_kind(entry)
    return EntryView(
        id=entry.pk,
        station=entry.station.name,
        when=when_text(entry.at, entry.until_at),
        tag=TAG_WORDS[LogTag(entry.tag)],
        text=entry.text,
        tap=entry.tap.name if entry.tap else "",
        run=entry.run.name if entry.run else "",
        run_id=entry.run_id,
        by=by,
        change=CHANGE_WORDS[ChangeKind(kind)] if kind else "",
        edits=getattr(entry, "edits", 0),
        is_struck=entry.struck_at is not None,
        has_picture=bool(entry.picture),
        asks=may_answer and entry.was_change is None and entry.struck_at is None,
    )


def when_text(at: datetime, until_at: datetime | None) -> str:
    """A moment, or ``2031-03-04 12:00:00 to 12:40:00``."""
    if until_at is None:
        return time_text(at)
    until = time_text(until_at)
    return f"{time_text(at)} to {until[11:] if until[:10] == time_text(at)[:10] else until}"


def mark_view(mark: LogMark) -> MarkView:
    """A change says what changed, else the tag is the word, and of a plain note its first words."""
    if mark.change:
        word = f"changed: {CHANGE_WORDS[ChangeKind(mark.change)]}"
    elif mark.tag == LogTag.NOTE:
        word = shortened(mark.text, 24) or "note"
    else:
        word = TAG_WORDS[LogTag(mark.tag)]
    return MarkView(
        at_ms=mark.at.timestamp() * 1e3,
        until_ms=None if mark.until_at is None else mark.until_at.timestamp() * 1e3,
        word=word,
        when=when_text(mark.at, mark.until_at),
        text=shortened(mark.text, _SHORT),
        is_change=mark.change is not None,
        station=mark.station,
        entry_id=mark.entry_id,
    )


def shortened(text: str, length: int) -> str:
    """The first line, cut at ``length``."""
    line = text.partition("\n")[0].strip()
    return line if len(line) <= length else f"{line[:length - 1].rstrip()}…"


def log_sentence(station: str, count: int, newest: ConfigurationChange | None) -> str:
    """What the logbook says of the bench, in one sentence."""
    if newest is not None:
        return f"{station} was last changed at {time_text(newest.at)} UTC: {CHANGE_WORDS[ChangeKind(newest.kind)]}."
    if count:
        return f"{station} has {count_text(count, 'entry', 'entries')} in its logbook; none says that its configuration changed."
    return f"Nobody has written in the logbook of {station} yet."
