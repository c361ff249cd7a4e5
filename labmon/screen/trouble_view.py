"""A station's troubles in words: what is so, since when, and what to do. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass

from analysis.reduce.trust import Reason
from ingest.clock_course import ClockCourse
from labmon.benches.doubts import OpenDoubt
from labmon.benches.queries import TapFacts
from labmon.benches.troubles import Troubles
from labmon.screen.present import count_text, er_text, number_text, time_text

#: An ER so far below 0 dB with the wanted port declared is no bad alignment but a port taken for the other.
SWAPPED_BELOW_DB = -3.0


def trouble_words(troubles: Troubles, taps: Sequence[TapFacts], doubts: Sequence[OpenDoubt] = ()) -> list[str]:
    """One or two sentences each, gravest first; what ``doubts`` asks of a person is not said twice."""
    said = []
    for two in troubles.two_devices:
        places = " and ".join(f"boot {boot}{f' from {address}' if address else ''}"
                              for boot, address in zip(two.boots, two.addresses, strict=True))
        said.append(f"Two devices send {two.tap} with one key: {places}, at once from {time_text(two.from_at)} to "
                    f"{time_text(two.until_at)}. Both are kept, neither is trusted there. Give each its own station and key.")
    asked = {doubt.tap for doubt in doubts if doubt.reason is Reason.PORTS_SWAPPED}
    said += [_swapped_words(tap) for tap in taps if _looks_swapped(tap) and tap.name not in asked]
    for missing in troubles.missing:
        said.append(f"{count_text(missing.count, 'reading')} of {missing.tap} in boot {missing.boot} never came: numbers are "
                    "missing. A full buffer drops the oldest; they may also still be under way.")
    return said


@dataclass(frozen=True, slots=True)
class Question:
    """What a person is asked of some taps at once, and how it can be answered: (answer, words of its button)."""

    ids: list[int]
    words: str
    answers: list[tuple[str, str]]
    zeros_of: list[str]
    calibration_of: str = ""


def questions(doubts: Sequence[OpenDoubt]) -> list[Question]:
    """One question for all taps of a station that new firmware concerns; one for each pair of ports that exchanged its light."""
    groups: dict[tuple[Reason, str], list[OpenDoubt]] = {}
    for doubt in doubts:
        about = doubt.text if doubt.reason is Reason.NEW_FIRMWARE else str(doubt.id)
        groups.setdefault((doubt.reason, about), []).append(doubt)
    return [_firmware_question(own) if reason is Reason.NEW_FIRMWARE else _swap_question(own[0])
            for (reason, _), own in groups.items()]


def _firmware_question(own: Sequence[OpenDoubt]) -> Question:
    zeros_of = [doubt.tap for doubt in own if doubt.has_zeros]
    taps = " and ".join(doubt.tap for doubt in own)
    until = "the zeros are taken again, or someone confirms" if zeros_of else "someone confirms"
    return Question([doubt.id for doubt in own],
                    f"New firmware since {time_text(min(doubt.from_at for doubt in own))}: {own[0].text}. What it does to "
                    f"zeros and averaging is not known: {taps} is doubtful from then on until {until} that nothing of the "
                    "measurement has changed.",
                    [("right", "Nothing of the measurement has changed")], zeros_of)


def _swap_question(doubt: OpenDoubt) -> Question:
    return Question([doubt.id],
                    f"{doubt.tap}: at {time_text(doubt.from_at)} {doubt.text}. Were the two inputs swapped, or was the light "
                    "turned by 90°? From here both look the same, and readings since then are doubtful: look at the bench. "
                    "Where the inputs are to stay as they are, enter the other port as the wanted one.",
                    [("right", "The light was turned: the readings are right"),
                     ("mended", "The inputs were swapped and are right again")], [], doubt.tap)


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
