"""A station's clock in words: how far it is off, with the doubt of that figure, and which fault it looks like. Pure."""

from dataclasses import dataclass
from typing import Final

from ingest.models import StationBoot
from labmon.screen.present import number_text

#: An offset beyond this is told as something to mend (JOB section 5).
WARN_AFTER_S: Final = 2.0

#: An offset this near to a whole hour is one of zone, daylight-saving or date.
WHOLE_HOUR_WITHIN_S: Final = 60.0


@dataclass(frozen=True, slots=True)
class ClockWords:
    """What to say of a boot's clock, and whether someone should look."""

    words: str
    is_fault: bool


def clock_state(boot: StationBoot) -> ClockWords:
    """One boot's clock in a sentence or two."""
    if boot.clock_fault:
        told = f"{boot.clock_fault}{kind_words(boot)}"
        timed = " Its readings are placed by their arrival; its own stamps are kept beside." if boot.is_server_timed else ""
        return ClockWords(f"{told}{timed}", True)
    if boot.is_server_timed:
        return ClockWords("Readings are placed by their arrival and the board's uptime.", False)
    if boot.clock_offset_us is None:
        return ClockWords("The station tells no clock: readings without a time of their own are placed by their arrival.", False)
    offset_s = boot.clock_offset_us / 1e6
    size = number_text(abs(offset_s), 1 if abs(offset_s) >= 1 else 2, "s")
    side = "behind" if offset_s > 0 else "ahead of"
    if abs(offset_s) > WARN_AFTER_S:
        return ClockWords(f"The clock is {size} {side} the server's. Readings stand where it says; set it, or let it follow a "
                          "time server.", True)
    return ClockWords(f"Clock and way to the server differ by {size}.", False)


def kind_words(boot: StationBoot) -> str:
    """Which mistake an offset of this size is; empty where it is none of the usual ones."""
    if boot.clock_offset_us is None or "not set" in boot.clock_fault:
        return ""
    offset_s = boot.clock_offset_us / 1e6
    hours = round(offset_s / 3600.0)
    if not hours or abs(offset_s - 3600.0 * hours) > WHOLE_HOUR_WITHIN_S:
        return ""
    if hours % 24 == 0:
        return f" That is {abs(hours) // 24} d to the minute: the date is wrong."
    if abs(hours) == 1:
        return " That is one hour to the minute: daylight-saving time, or a zone, taken for UTC."
    return f" That is {abs(hours)} h to the minute: local time sent as UTC." if abs(hours) <= 14 else ""
