"""A run's ledger: read in versions, made anew, two versions compared."""

from datetime import datetime, timedelta
from typing import Any

from django.http import HttpRequest, HttpResponse

from analysis.judge.ledger import Intervals
from analysis.judge.ledger_change import change_between
from analysis.judge.ledger_tap import LedgerClass
from labmon.api.answer import json_answer
from labmon.api.body import Body, Text, body_of
from labmon.api.problem import not_found, wrong_field
from labmon.api.query import known_only, whole_number
from labmon.api.runs import run_named
from labmon.api.times import parse_time, rfc3339
from labmon.people.models import Person
from labmon.people.rights import Action, require
from labmon.runs.ledgers import Unusable, ask_ledger, interval_rows, ledger_of, ledgers_of, stretches
from labmon.runs.models import Run, RunLedger

MOST_INTERVALS = 10_000
_TOTALS = ("good_s", "below_s", "untrusted_s", "no_reading_s", "doubtful_s", "longest_good_s")


def get_ledger(request: HttpRequest, person: Person, run_id: int) -> HttpResponse:
    """The newest version, or the one asked for; intervals from ``first`` on."""
    known_only(request.GET, "version", "first")
    run = run_named(person, run_id)
    number = whole_number(request.GET, "version", default=0, least=0, most=2**31 - 1)
    ledger = _version(run, number) if number else _newest(run)
    first = whole_number(request.GET, "first", default=0, least=0, most=2**31 - 1)
    return json_answer(ledger_facts(ledger, first))


def ledger_facts(ledger: RunLedger, first: int = 0) -> dict[str, Any]:
    """A version as the document names it."""
    found = stretches(ledger) if ledger.made_at else None
    count = len(found) if found else 0
    part = None if found is None else Intervals(
        *(getattr(found, name)[first:first + MOST_INTERVALS] for name in Intervals.__dataclass_fields__))
    length = ledger.length_s
    is_made = ledger.made_at is not None
    return {
        "run": ledger.run_id, "version": ledger.number, "state": "made" if is_made else "failed" if ledger.fault else "waiting",
        "from": rfc3339(ledger.from_at), "until": rfc3339(ledger.until_at), "length_s": length,
        "asked_at": rfc3339(ledger.asked_at), "asked_by": ledger.asked_by.username if ledger.asked_by else None,
        "reason": ledger.reason, "made_at": rfc3339(ledger.made_at), "done_share": ledger.done_share, "fault": ledger.fault,
        **{name: getattr(ledger, name) for name in _TOTALS},
        "longest_good_from": None if ledger.longest_good_from_s is None
        else rfc3339(ledger.from_at + timedelta(seconds=ledger.longest_good_from_s)),
        "usable_share": ledger.good_s / length if is_made else None,
        "trusted_share": (ledger.good_s + ledger.below_s) / length if is_made else None,
        "edits": ledger.edits, "facts": ledger.facts,
        "intervals": [] if part is None else [
            {"from": rfc3339(row.from_at), "until": rfc3339(row.until_at), "length_s": row.length_s, "class": row.klass.words,
             "is_doubtful": row.is_doubtful, "reasons": list(row.reasons), "taps": list(row.taps)}
            for row in interval_rows(ledger, part)],
        "next": first + MOST_INTERVALS if first + MOST_INTERVALS < count else None,
        "versions": sorted(ledger.run.ledgers.values_list("number", flat=True)),
    }


class NewLedger(Body):
    """The body of POST …/ledger."""

    reason: Text
    unusable: list[dict[str, Text]] = []
    levels: dict[str, float] = {}


def post_ledger(request: HttpRequest, person: Person, run_id: int) -> HttpResponse:
    """Ask for the next version; it is made in the background."""
    known_only(request.GET)
    run = run_named(person, run_id)
    require(person, Action.CHANGE_RUN, run)
    wish = body_of(request, NewLedger)
    spans = [_span(number, one) for number, one in enumerate(wish.unusable)]
    if not all(key.isascii() and key.isdigit() and len(key) < 19 for key in wish.levels):
        raise wrong_field("levels", "A key is no limit's id.", "Use the ids that the run's limits have.")
    levels = {int(key): level for key, level in wish.levels.items()}
    ledger = ask_ledger(run, by=person, reason=wish.reason, unusable=spans, levels=levels)
    return json_answer(ledger_facts(ledger), status=202)


def get_ledger_change(request: HttpRequest, person: Person, run_id: int) -> HttpResponse:
    """Two versions compared, second by second."""
    known_only(request.GET, "before", "after")
    run = run_named(person, run_id)
    numbers = [whole_number(request.GET, name, default=0, most=2**31 - 1) for name in ("before", "after")]
    before, after = (_version(run, number) for number in numbers)
    for name, one in (("before", before), ("after", after)):
        if one.made_at is None:
            raise wrong_field(name, f"Version {one.number} is not made.", "Wait for it, or choose another.")
    change = change_between(stretches(before), stretches(after))
    rows = zip(*(getattr(change, name).tolist()[:MOST_INTERVALS] for name in ("first_s", "length_s", "before", "after")),
               strict=True)
    return json_answer({
        "run": run.pk, "before": before.number, "after": after.number, "changed_s": change.changed_s,
        "counts": [{"before": one.words, "after": other.words, "seconds": int(change.counts[one, other])}
                   for one in LedgerClass for other in LedgerClass if change.counts[one, other]],
        "stretches": [{"from": rfc3339(before.from_at + timedelta(seconds=first)),
                       "until": rfc3339(before.from_at + timedelta(seconds=first + length)),
                       "before": LedgerClass(old).words, "after": LedgerClass(new).words} for first, length, old, new in rows],
    })


def _newest(run: Run) -> RunLedger:
    every = ledgers_of(run)
    made = next((one for one in every if one.made_at), None)
    if not every:
        raise not_found("There is no ledger yet.", "It is made two minutes after the run's end.")
    return _version(run, (made or every[0]).number)


def _version(run: Run, number: int) -> RunLedger:
    ledger = ledger_of(run, number)
    if ledger is None:
        raise not_found("The ledger has no such version.", "GET …/ledger lists the versions there are.")
    return ledger


def _span(number: int, said: dict[str, str]) -> Unusable:
    field = f"unusable[{number}]"
    if set(said) != {"from", "until", "why"}:
        raise wrong_field(field, "A span has from, until and why.", "Give these three and nothing else.")
    return Unusable(_time(field, said["from"]), _time(field, said["until"]), said["why"])


def _time(field: str, text: str) -> datetime:
    try:
        return parse_time(text)
    except ValueError as error:
        raise wrong_field(field, f"{field} cannot be used.", f"{str(error)[:1].upper()}{str(error)[1:]}.") from None
