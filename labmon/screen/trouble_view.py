"""A station's troubles in words: what is so, since when, and what to do. Pure."""

from collections.abc import Sequence

from ingest.clock_course import ClockCourse
from labmon.benches.queries import TapFacts
from labmon.benches.troubles import Troubles
from labmon.screen.present import count_text, er_text, number_text, time_text

#: An ER so far below 0 dB with the wanted port declared is no bad alignment but a port taken for the other.
SWAPPED_BELOW_DB = -3.0


def trouble_words(troubles: Troubles, taps: Sequence[TapFacts]) -> list[str]:
    """One or two sentences each, gravest first."""
    said = []
    for two in troubles.two_devices:
        places = " and ".join(f"boot {boot}{f' from {address}' if address else ''}"
                              for boot, address in zip(two.boots, two.addresses, strict=True))
        said.append(f"Two devices send {two.tap} with one key: {places}, at once from {time_text(two.from_at)} to "
                    f"{time_text(two.until_at)}. Both are kept, neither is trusted there. Give each its own station and key.")
    said += [_swapped_words(tap) for tap in taps if _looks_swapped(tap)]
    for new in troubles.firmware:
        said.append(f"New firmware since {time_text(new.at)}: {new.after} after {new.before}. What it does to zeros and "
                    "averaging is not known: take the zeros again.")
    for missing in troubles.missing:
        said.append(f"{count_text(missing.count, 'reading')} of {missing.tap} in boot {missing.boot} never came: numbers are "
                    "missing. A full buffer drops the oldest; they may also still be under way.")
    return said


def clock_course_words(course: ClockCourse | None) -> str:
    """How the clock ran of late; empty where nothing is known."""
    if course is None:
        return ""
    offset = number_text(abs(course.offset_s), 2, "s")
    side = "behind" if course.offset_s >= 0 else "ahead of"
    said = (f"By the last {course.batches} batches the station's clock is {offset} {side} the server's, the shortest way "
            f"included, ± {number_text(course.error_s, 2, 's')}.")
    if course.step_s is not None and course.step_us is not None:
        word = "back" if course.step_s > 0 else "forward"
        said += f" It was set {word} by {number_text(abs(course.step_s), 1, 's')} meanwhile."
    if course.skew_ppm is not None:
        word = "slow" if course.skew_ppm > 0 else "fast"
        said += f" It runs {word} by {abs(course.skew_ppm):.0f} parts in a million."
    return said


def _looks_swapped(tap: TapFacts) -> bool:
    return tap.kind == "two-port" and tap.now is not None and tap.now.er_db is not None and tap.now.er_db < SWAPPED_BELOW_DB


def _swapped_words(tap: TapFacts) -> str:
    wanted = tap.calibration.wanted_port if tap.calibration else 1
    er = er_text(tap.now.er_db if tap.now else None)
    return (f"{tap.name}: port {3 - wanted} is the brighter one, though port {wanted} is wanted ({er.replace('-', '−')}). Were "
            "the two inputs swapped, or was the light turned by 90°? From here both look the same: look at the bench.")
