"""A rehearsal in words. Pure."""

import json
from dataclasses import dataclass

from analysis.judge.rehearsal import Call
from ingest.times import at_of
from labmon.experiments.rehearsal import Rehearsed
from labmon.screen.present import age_text, count_text, time_text

MOST_ROWS = 50
#: So many spans are drawn at most, the newest.
MOST_SPANS = 1000


@dataclass(frozen=True, slots=True, kw_only=True)
class RehearsalView:
    """The sentence, and (raised, level, lasted, lead) of the newest calls."""

    sentence: str
    rows: list[tuple[str, str, str, str]]
    left_out: int
    spans: str


def rehearsal_view(found: Rehearsed) -> RehearsalView:
    """What the limit would have done."""
    days = (found.until_us - found.from_us) / 86_400e6
    span = f"the last {days:.0f} days" if days >= 1.5 else f"the last {age_text(days * 86_400)}"
    if not found.calls:
        said = f"In {span} this limit would have called nobody."
    else:
        said = f"In {span} this limit would have called {count_text(len(found.calls), 'time')}, {found.at_night} at night"
        said += f", {age_text(found.open_s)} in all"
        if found.longest_s is not None:
            said += f", the longest {age_text(found.longest_s)}"
        leads = sorted(call.lead_s for call in found.calls if call.lead_s is not None)
        if leads:
            said += f"; half of {count_text(len(leads), 'call')} at least {_lead(leads[len(leads) // 2])} the limit in force"
        said += "."
    rows = [_row(call) for call in reversed(found.calls[-MOST_ROWS:])]
    return RehearsalView(sentence=said, rows=rows, left_out=max(len(found.calls) - MOST_ROWS, 0),
                         spans=json.dumps([_span(call, found.until_us) for call in found.calls[-MOST_SPANS:]]))


def _span(call: Call, until_us: int) -> list[float | str]:
    """From, until (ms since 1970) and level: what the plot draws."""
    returned_us = until_us if call.returned_us is None else call.returned_us
    return [call.raised_us / 1e3, returned_us / 1e3, "warning" if call.alarm_us is None else "alarm"]


def _row(call: Call) -> tuple[str, str, str, str]:
    lasted = "open" if call.returned_us is None else age_text((call.returned_us - call.raised_us) / 1e6)
    level = "warning" if call.alarm_us is None else "alarm"
    return time_text(at_of(call.raised_us)), level, lasted, "" if call.lead_s is None else _lead(call.lead_s)


def _lead(lead_s: float) -> str:
    return f"{age_text(abs(lead_s))} {'before' if lead_s >= 0 else 'after'}"
