"""A clearance in words: one sentence first, with N and the bound always. Pure, but for the times it names.

The same sentences stand on the page, in the mail and in the API.
"""

import math
from datetime import datetime

from analysis.outlook.comparable import SetAside, Widening
from analysis.outlook.together import Together
from analysis.outlook.verdict import CLEARED_WINDOWS, Reason, Verdict
from ingest.times import at_of
from labmon.alarms.words import span_text
from labmon.clearance.ask import Answer, LimitAnswer, Question

#: A window that holds this hour (UTC) and is no longer than a day is called a night.
_DEEP_NIGHT_H = 2.0
_BEGINNINGS = {Verdict.CLEARED: "Cleared", Verdict.THIN: "Likely but thin", Verdict.NOT_CLEARED: "Not cleared",
               Verdict.NOT_ENOUGH: "Not enough evidence"}


def sentence(answer: Answer) -> str:
    """The answer in one sentence, such as ``Cleared: 14 of 14 such nights held; failure up to 19 %.``"""
    together = answer.together
    if together is None:
        return "Not enough evidence: no limit on the extinction ratio or the angle is in force, so there is nothing to hold."
    counted = counts(together, window_word(answer.question))
    first = _first_reason(answer, together)
    return f"{_BEGINNINGS[together.verdict]}: {f'{first}; ' if first else ''}{counted}."


def counts(together: Together, window: str) -> str:
    """``14 of 14 such nights held; failure up to 19 %``."""
    if together.count == 0:
        return f"no such {window} to count"
    many = window if together.count == 1 else f"{window}s"
    return f"{together.held} of {together.count} such {many} held; failure up to {per_cent(together.failure_bound)}"


def per_cent(share: float) -> str:
    """``19 %``."""
    return f"{100.0 * share:.0f}\N{NO-BREAK SPACE}%"


def window_word(question: Question) -> str:
    """``night`` for windows that hold 02:00 UTC and last no longer than a day, else ``window``."""
    start_h = at_of(question.start_us).hour + at_of(question.start_us).minute / 60.0
    length_h = question.length_s / 3600.0
    return "night" if 2.0 <= length_h <= 24.0 and (_DEEP_NIGHT_H - start_h) % 24.0 < length_h else "window"


def reasons(answer: Answer) -> list[str]:
    """What speaks against a better word, a sentence each, in order of weight."""
    if answer.together is None:
        return ["Set a limit on the extinction ratio or the angle first."]
    return [_reason_sentence(reason, answer) for reason in answer.together.reasons]


def remedies(answer: Answer) -> list[str]:
    """What would change the verdict, all else as it is, a sentence each."""
    together, word = answer.together, window_word(answer.question)
    if together is None or together.verdict is Verdict.CLEARED:
        return []
    found = [_READING[reason] for reason in together.reasons if reason in _READING]
    if together.further_windows:
        more = together.further_windows
        found.append(f"{more} more comparable {word}{'' if more == 1 else 's'} without a failure would clear it.")
    if Reason.FAILED in together.reasons and len(answer.limits) == 1 and together.count >= CLEARED_WINDOWS:
        found += _easier(answer.limits[0], answer.question)
    return found


def _easier(limit: LimitAnswer, question: Question) -> list[str]:
    remedy, found = limit.clearance.remedy, []
    if math.isfinite(remedy.length_s) and 60.0 <= remedy.length_s < question.length_s:
        found.append(f"A run of at most {span_text(remedy.length_s)} would be cleared by the same past.")
    if math.isfinite(remedy.limit_rad) and remedy.limit_rad > limit.asked.limit_rad:
        found.append(f"A limit of {_both(remedy.limit_rad)} would be cleared by the same past; "
                     "whether the run bears that is for you to say.")
    return found


def _both(angle_rad: float) -> str:
    er_db = -20.0 * math.log10(math.tan(0.5 * angle_rad)) if angle_rad < math.pi else -math.inf
    return f"{math.degrees(angle_rad):.1f}° ({er_db:.1f} dB)"


_READING = {
    Reason.READING_UNTRUSTED: "Mend what makes the reading doubtful; the evidence is then counted again.",
    Reason.AT_FLOOR: "Take a zero, or use a detector with a lower floor, so that the angle is known.",
    Reason.OPEN_CAUSE: "Find and close what is open.",
    Reason.BEYOND_NOW: "Align until the reading is within the limit.",
    Reason.TEMPERATURE_UNSEEN: "Wait until the room is as warm as in the nights that count.",
    Reason.HOUR_UNSEEN: "Choose a start within two hours of one that has been seen.",
    Reason.LENGTH_UNSEEN: "Choose a shorter run.",
}


def _first_reason(answer: Answer, together: Together) -> str:
    """The reason that stands in the sentence; none where counts say it."""
    order = (Reason.READING_UNTRUSTED, Reason.AT_FLOOR, Reason.CHANGED, Reason.BEYOND_NOW, Reason.OPEN_CAUSE,
             Reason.LENGTH_UNSEEN, Reason.HOUR_UNSEEN, Reason.TEMPERATURE_UNSEEN)
    found = next((reason for reason in order if reason in together.reasons), None)
    if found is None:
        return ""
    said = _reason_sentence(found, answer).rstrip(".")
    return said[:1].lower() + said[1:]


def _reason_sentence(reason: Reason, answer: Answer) -> str:
    word = window_word(answer.question)
    match reason:
        case Reason.READING_UNTRUSTED:
            return f"The reading now is not trusted{_of(answer, _untrusted)}."
        case Reason.AT_FLOOR:
            return "The angle now is not known: the dark port is at its floor."
        case Reason.CHANGED:
            return f"The configuration changed at {_last_change(answer):%Y-%m-%d %H:%M} UTC, and what was before does not count."
        case Reason.BEYOND_NOW:
            return "It is beyond its limit now."
        case Reason.OPEN_CAUSE:
            return f"Something is still open ({'; '.join(answer.open_causes[:3])})."
        case Reason.FEW_WINDOWS:
            return f"Fewer than 7 comparable {word}s are stored."
        case Reason.THIN:
            return f"Fewer than 14 comparable {word}s are stored."
        case Reason.FAILED:
            return f"Too many comparable {word}s would have failed from today's state."
        case Reason.LENGTH_UNSEEN:
            return "The run is longer than anything seen here."
        case Reason.HOUR_UNSEEN:
            return "No comparable window starts within two hours of this hour."
        case Reason.TEMPERATURE_UNSEEN:
            return "The room is colder or warmer now than in any window that counts."
    return f"{reason.value}."


def _of(answer: Answer, words) -> str:  # type: ignore[no-untyped-def]
    found = [said for limit in answer.limits if (said := words(limit))]
    return f" ({'; '.join(dict.fromkeys(found))})" if found else ""


def _untrusted(limit: LimitAnswer) -> str:
    if not limit.is_told:
        return f"{limit.asked.tap_name}: no wanted state set"
    return "" if limit.start.is_trusted else f"{limit.asked.tap_name}: {', '.join(limit.start.why_not)}"


def _last_change(answer: Answer) -> datetime:
    return at_of(max(limit.changed_at_us for limit in answer.limits if limit.changed_at_us is not None))


def widened_words(steps: tuple[Widening, ...]) -> str:
    """``working days and weekends pooled``; empty where every window is of the run's own kind."""
    return ", ".join(step.value for step in steps)


def set_aside_words(found: tuple[tuple[int, SetAside], ...]) -> list[str]:
    """How many windows do not count, by reason."""
    counted: dict[SetAside, int] = {}
    for _, why in found:
        counted[why] = counted.get(why, 0) + 1
    return [f"{count} ({why.value})" for why, count in sorted(counted.items(), key=lambda pair: -pair[1])]


def times_words(answer: Answer) -> str:
    """By when half and a tenth of the replays had reached the limit."""
    together = answer.together
    if together is None or together.count == 0:
        return ""
    if math.isinf(together.tenth_s):
        return "Fewer than one in ten of the replays reached the limit within the run."
    median = ("half of them did not within the run" if math.isinf(together.median_s)
              else f"half of them by {span_text(together.median_s)}")
    return f"One in ten of the replays reached the limit by {span_text(together.tenth_s)}; {median}."
