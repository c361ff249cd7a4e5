"""Files of the watched folder in words: how far each was read, or what is wrong with it. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass

from ingest.models import WatchedFile
from labmon.screen.present import count_text, time_text


@dataclass(frozen=True, slots=True)
class FollowedView:
    """One file's row."""

    tap: str
    name: str
    changed: str
    said: str
    is_at_fault: bool


def followed_view(file: WatchedFile) -> FollowedView:
    """One file in words."""
    return FollowedView(file.tap.name, file.name, time_text(file.changed_at), _said(file), bool(file.problem))


def _said(file: WatchedFile) -> str:
    if file.problem:
        held = f" What came before is kept: {file.record.stored:,} readings." if file.record and file.record.stored else ""
        return f"Not read: {file.problem.rstrip('.')}.{held}"
    record = file.record
    if record is None:
        return "Nothing to read yet."
    said = f"Read to its last line: {record.stored:,} stored, {record.known:,} known, {record.set_aside:,} set aside."
    return said if file.is_in_order else (
        f"{said} Its lines are not in the order of their times, so it is read whole each time it grows: cut it into daily files.")


def followed_sentence(files: int, at_fault: Sequence[str], strange: Sequence[str], *, is_watched: bool, is_there: bool) -> str:
    """The watched folder as a whole, for the health page.

    Args:
        at_fault: ``STATION/TAP/FILE: why`` of those that cannot be read. strange: Folders that belong to no tap.
    """
    if not is_watched:
        return "No folder is watched. LABMON_WATCHED_FOLDER names one."
    if not is_there:
        return "The watched folder is not there: LABMON_WATCHED_FOLDER names no folder that this machine has."
    said = f"{count_text(files, 'file')} of the watched folder {'is' if files == 1 else 'are'} followed"
    said += f"; {len(at_fault)} cannot be read." if at_fault else ", all are read to their last line." if files else "."
    if strange:
        said += f" Nobody reads {', '.join(strange[:10])}: there is no such tap. Name the folders STATION/TAP."
    return said
