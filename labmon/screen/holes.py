"""Raw readings that are no longer kept or cannot be read, in words beside what is drawn."""

from collections.abc import Sequence

from ingest.store.read import Hole, HoleKind
from ingest.times import at_of


def holes_sentence(holes: Sequence[Hole]) -> str:
    """What stands behind the sentence of a history; empty where nothing is missing."""
    said = ""
    not_kept = [hole for hole in holes if hole.kind is HoleKind.NOT_KEPT]
    unreadable = [hole for hole in holes if hole.kind is HoleKind.UNREADABLE]
    if not_kept:
        said += f" Raw no longer kept {_days(not_kept)}: shown from rollups ({not_kept[-1].why})."
    if unreadable:
        said += f" Raw unreadable {_days(unreadable)}: shown from rollups where there are any; the health page has the file."
    return said


def _days(holes: Sequence[Hole]) -> str:
    days = list(dict.fromkeys(at_of(hole.from_us).strftime("%Y-%m-%d") for hole in holes))
    return f"on {days[0]}" if len(days) == 1 else f"from {days[0]} to {days[-1]}"
