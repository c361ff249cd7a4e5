"""Ledgers of runs: asking for a version, and reading what is made.

Each version stays as it was made; a recompute or an edit makes the next one, with who asked and why.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any

from django.db import transaction
from django.db.models import Max
from django.utils import timezone

from analysis.judge.ledger import Intervals
from analysis.judge.ledger_tap import LedgerClass, LedgerReason
from analysis.reduce.trust import reasons_in
from labmon.audit.actions import note
from labmon.errors import WriteError
from labmon.live.publish import publish
from labmon.people.models import Person
from labmon.runs.ledger_body import unpacked
from labmon.runs.models import Run, RunLedger
from labmon.runs.queries import declared_runs
from labmon.runs.wishes import checked_reason, minute

#: Readings of a run's last seconds are given so long to arrive before its first ledger is made (our own choice).
MADE_AFTER = timedelta(minutes=2)
MOST_SPANS = 200


@dataclass(frozen=True, slots=True)
class Unusable:
    """A half-open span that a person declares not to be used, and why."""

    from_at: datetime
    until_at: datetime
    why: str


@dataclass(frozen=True, slots=True)
class LedgerInterval:
    """One stretch of a ledger; ``taps`` are those that decided it, by name."""

    from_at: datetime
    until_at: datetime
    length_s: int
    klass: LedgerClass
    is_doubtful: bool
    reasons: tuple[str, ...]
    taps: tuple[str, ...]


@transaction.atomic
def ask_ledger(
    run: Run,
    *,
    by: Person | None,
    reason: str = "",
    unusable: Iterable[Unusable] = (),
    levels: Mapping[int, float] | None = None,
) -> RunLedger:
    """Ask for the next version of a run's ledger: with what is known now, and with edits.

    Args:
        unusable: Spans taken away from good.
        levels: Alarm levels, by limit id, to be used through the whole run instead of those in force.
    Raises:
        WriteError: The run has not ended, a version is already being made, an edit cannot be meant, or (from the second
            version on) no reason is given.
    """
    locked = Run.objects.select_for_update(of=("self",)).get(pk=run.pk)
    if locked.cancelled_at or locked.over_at > timezone.now():
        raise WriteError("run", f"{locked.name} has not ended.", "The ledger is made when it has; stop it to end it now.")
    if locked.ledgers.filter(made_at=None, fault="").exists():
        raise WriteError("run", "A version of this ledger is being made.", "Wait until it is there.")
    number = (locked.ledgers.aggregate(last=Max("number"))["last"] or 0) + 1
    why = checked_reason(reason)
    if number > 1 and not why:
        raise WriteError("reason", "Nobody would know why there is another version.", "Say what has changed.")
    edits = {"unusable": _checked_spans(locked, unusable), "levels": _checked_levels(locked, levels or {})}
    ledger = RunLedger.objects.create(
        run=locked, number=number, asked_by=by, reason=why, edits=edits, from_at=locked.starts_at, until_at=locked.over_at
    )
    note(by, "make ledger", locked, None, {"version": number} | edits, why, as_name="labmon")
    publish({"kind": "runs", "ids": [locked.pk], "experiments": [locked.experiment_id]})
    return ledger


def ask_due_ledgers(now: datetime | None = None) -> list[int]:
    """Ask for the first ledger of runs that ended a little ago; the beat's. Returns the runs' ids."""
    clock = now or timezone.now()
    ended = declared_runs().filter(over__lte=clock - MADE_AFTER, ledgers=None).order_by("starts_at", "pk")
    asked = []
    for run in ended[:50]:
        try:
            ask_ledger(run, by=None, reason="the run ended")
        except WriteError:  # somebody else was first
            continue
        asked.append(run.pk)
    return asked


def ledgers_of(run: Run) -> list[RunLedger]:
    """All versions, newest first, without their bodies."""
    return list(run.ledgers.defer("body").select_related("asked_by").order_by("-number"))


def newest_ledger(run: Run) -> RunLedger | None:
    """The newest version that is made, or None."""
    return run.ledgers.exclude(made_at=None).select_related("asked_by").order_by("-number").first()


def newest_ledgers(run_ids: Iterable[int]) -> dict[int, RunLedger]:
    """The newest made version of each of several runs, without bodies; one query."""
    made = RunLedger.objects.filter(run__in=list(run_ids)).exclude(made_at=None).defer("body", "facts")
    return {one.run_id: one for one in made.order_by("run_id", "-number").distinct("run_id")}


def ledger_of(run: Run, number: int) -> RunLedger | None:
    """One version, made or not."""
    return run.ledgers.filter(number=number).select_related("asked_by").first()


def stretches(ledger: RunLedger) -> Intervals:
    """The ledger's intervals as arrays (analysis/judge/ledger.py), in seconds of the run.

    Raises:
        ValueError: It is not made yet.
    """
    if ledger.made_at is None:
        raise ValueError(f"version {ledger.number} of the ledger is not made yet; wait for it.")
    return unpacked(ledger.body)


def interval_rows(ledger: RunLedger, found: Intervals | None = None) -> list[LedgerInterval]:
    """The ledger's intervals (or some of them) with times, words and names, in order."""
    found = stretches(ledger) if found is None else found
    names = [tap["tap"] for tap in ledger.facts["taps"]]
    rows = []
    for first, length, klass, is_doubtful, why, taps in zip(
        *(getattr(found, name).tolist() for name in ("first_s", "length_s", "klass", "is_doubtful", "why", "taps")), strict=True
    ):
        from_at = ledger.from_at + timedelta(seconds=first)
        deciding = tuple(name for place, name in enumerate(names) if taps >> place & 1)
        rows.append(
            LedgerInterval(
                from_at, from_at + timedelta(seconds=length), length, LedgerClass(klass), is_doubtful, reason_words(why), deciding
            )
        )
    return rows


def reason_words(why: int) -> tuple[str, ...]:
    """A ledger's reason bits as short phrases."""
    own = [reason.words for reason in LedgerReason if why & reason]
    return (*own, *(reason.words for reason in reasons_in(why & 0xFFFFFF)))


def _checked_spans(run: Run, spans: Iterable[Unusable]) -> list[dict[str, Any]]:
    kept = []
    for span in spans:
        if not run.starts_at <= span.from_at < span.until_at <= run.over_at:
            raise WriteError(
                "unusable",
                f"{minute(span.from_at)} to {minute(span.until_at)} is no part of the run.",
                f"Choose a span from {minute(run.starts_at)} to {minute(run.over_at)}.",
            )
        if not span.why.strip():
            raise WriteError("unusable", "A span without a reason would not be understood later.", "Say why it is unusable.")
        text = {"from_at": span.from_at.isoformat(), "until_at": span.until_at.isoformat(), "why": checked_reason(span.why)}
        kept.append(text)
    if len(kept) > MOST_SPANS:
        raise WriteError("unusable", f"More than {MOST_SPANS} spans.", "Join those that touch.")
    return kept


def _checked_levels(run: Run, levels: Mapping[int, float]) -> dict[str, float]:
    known = set(run.limits.values_list("limit_version__limit_id", flat=True))
    for limit_id, level in levels.items():
        if limit_id not in known:
            raise WriteError("levels", f"Limit {limit_id} did not rule in this run.", "Use the id of a limit that did.")
        if isinstance(level, bool) or not isinstance(level, (int, float)) or not -1e6 < level < 1e6:
            raise WriteError("levels", f"{level!r} is no level.", "Give a number in the quantity's unit.")
    return {str(limit_id): float(level) for limit_id, level in levels.items()}
