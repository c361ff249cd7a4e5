"""Makes the versions of ledgers that are asked for: tap by tap, stretch by stretch, telling how far it is.

A worker that dies leaves a version that is not made; after a while another takes it up from the beginning.
"""

import logging
import time
from datetime import datetime, timedelta
from typing import Any, Final

import numpy as np
from django.db import OperationalError, transaction
from django.db.models import Q
from django.utils import timezone
from django.utils.dateparse import parse_datetime

from analysis.judge.ledger import (
    Account,
    TapFigures,
    add_tap,
    declare_unusable,
    figures_of,
    intervals_of,
    joined,
    note_holes,
    totals_of,
)
from analysis.judge.ledger_tap import LedgerReason, Ruling, TapFold, TapSeconds, fold_tap
from analysis.judge.rule import Quantity
from analysis.record.calibrations import FIELDS, versions_of
from ingest.models import Tap
from ingest.store.read import Hole, HoleKind
from ingest.times import SECOND_US, us_of
from labmon.benches.pace import interval_of
from labmon.live.publish import publish
from labmon.runs.ledger_body import packed
from labmon.runs.limits import RulingLimit, note_start_limits, ruling_limits
from labmon.runs.models import Run, RunLedger
from labmon.runs.samples import stretches_of
from labmon.software import VERSION

log = logging.getLogger(__name__)

#: A version whose worker has said nothing for so long is taken up anew.
LEFT_AFTER: Final = timedelta(minutes=5)
TELL_EVERY_S: Final = 1.0
_HOLE_REASON: Final = {HoleKind.NOT_KEPT: LedgerReason.NOT_KEPT, HoleKind.UNREADABLE: LedgerReason.UNREADABLE}


def make_waiting_ledgers(*, for_s: float = float("inf")) -> list[int]:
    """Make what is asked for, oldest first, beginning none after ``for_s`` seconds; returns the ids of those made."""
    began, made = time.monotonic(), []
    while time.monotonic() - began < for_s and (ledger := _take_one()) is not None:
        make_ledger(ledger)
        made.append(ledger.pk)
    return made


@transaction.atomic
def _take_one() -> RunLedger | None:
    """The oldest version that nobody works on, now taken."""
    now = timezone.now()
    free = Q(beat_at=None) | Q(beat_at__lt=now - LEFT_AFTER)
    waiting = RunLedger.objects.filter(free, made_at=None, fault="").order_by("asked_at", "pk")
    ledger = waiting.select_for_update(skip_locked=True, of=("self",)).select_related("run__experiment").first()
    if ledger is not None:
        note_start_limits(Run.objects.select_for_update(of=("self",)).get(pk=ledger.run_id), now)
        ledger.beat_at = now
        ledger.save(update_fields=["beat_at"])
    return ledger


def make_ledger(ledger: RunLedger) -> None:
    """Account for the run's seconds and keep the version; a fault is kept with it, in words."""
    began = time.monotonic()
    try:
        _make(ledger)
    except OperationalError:  # the database was away: another worker takes it up
        raise
    except Exception as fault:
        RunLedger.objects.filter(pk=ledger.pk, made_at=None).update(fault=f"{type(fault).__name__}: {fault}"[:500])
        publish({"kind": "runs", "ids": [ledger.run_id], "experiments": [ledger.run.experiment_id]})
        raise
    took_s = round(time.monotonic() - began, 3)
    log.info("ledger_made", extra={"run_id": ledger.run_id, "version": ledger.number, "took_s": took_s})


def _make(ledger: RunLedger) -> None:
    run, as_of = ledger.run, timezone.now()
    taps = list(run.taps.select_related("station").order_by("station__name", "name"))
    rulings = ruling_limits(run)
    account, figures, tell = Account.of(ledger.length_s), [], _Teller(ledger, len(taps))
    for place, tap in enumerate(taps):
        parts, holes = _tap_seconds(ledger, tap, _rulings(ledger, tap, rulings), as_of, lambda share, n=place: tell(n, share))
        add_tap(account, joined(parts))
        note_holes(account, holes)
        figures.append(figures_of(parts))
    declare_unusable(account, [_span_s(ledger, span["from_at"], span["until_at"]) for span in ledger.edits.get("unusable", [])])
    _keep(ledger, account, _facts(ledger, taps, figures, rulings, as_of))


def _rulings(ledger: RunLedger, tap: Tap, ruling: list[RulingLimit]) -> list[Ruling]:
    """The tap's levels as the fold takes them; a level asked for instead holds as long as any version of its limit did."""
    levels = ledger.edits.get("levels", {})
    return [
        Ruling(
            Quantity(one.limit.quantity),
            levels.get(str(one.limit.pk), one.version.alarm),
            us_of(one.from_at),
            us_of(one.until_at),
        )
        for one in ruling
        if one.limit.tap_id == tap.pk
    ]


def _tap_seconds(
    ledger: RunLedger, tap: Tap, rulings: list[Ruling], as_of: datetime, tell: Any
) -> tuple[list[TapSeconds], list[tuple[int, int, LedgerReason]]]:
    """One tap's seconds in stretches, and its holes in seconds of the run."""
    from_us, until_us = us_of(ledger.from_at), us_of(ledger.until_at)
    parts, holes, state = [], [], TapFold()
    for stretch in stretches_of(tap, from_us, until_us, interval_of(tap), as_of):
        state, seconds = fold_tap(
            state,
            stretch.samples,
            rulings,
            stretch.from_us,
            stretch.until_us,
            next_at_us=stretch.next_at_us,
            interval_s=tap.interval_s,
        )
        if stretch.from_us < from_us:  # the lead
            continue
        parts.append(seconds)
        holes += [_hole_s(hole, from_us) for hole in stretch.holes]
        tell((stretch.until_us - from_us) / (until_us - from_us))
    return parts, holes


def _hole_s(hole: Hole, from_us: int) -> tuple[int, int, LedgerReason]:
    """A hole as seconds of the run; a second that it touches belongs to it."""
    behind_us = hole.until_us + 1 - from_us
    return (max(hole.from_us - from_us, 0) // SECOND_US, -(-behind_us // SECOND_US), _HOLE_REASON[hole.kind])


def _span_s(ledger: RunLedger, from_at: str, until_at: str) -> tuple[int, int]:
    """A span as seconds of the run; a second cut by it belongs to it."""
    begin, end = ((parse_datetime(at) - ledger.from_at).total_seconds() for at in (from_at, until_at))  # type: ignore[operator]
    return int(begin // 1), int(-(-end // 1))


def _facts(
    ledger: RunLedger, taps: list[Tap], figures: list[TapFigures], rulings: list[RulingLimit], as_of: datetime
) -> dict[str, Any]:
    """What the ledger was made with and from, as plain values."""
    calibrations = versions_of([tap.pk for tap in taps], as_of)
    levels = ledger.edits.get("levels", {})
    return {
        "labmon": VERSION,
        "numpy": np.__version__,
        "calibrations_as_of": as_of.isoformat(),
        "allowed_below_s": ledger.run.allowed_below_s,
        "wanted_trusted_share": ledger.run.wanted_trusted_share,
        "taps": [
            {
                "tap": f"{tap.station.name}/{tap.name}",
                "kind": tap.kind,
                "unit": tap.unit,
                "mean_er_db": own.mean_er_db,
                "quantile_er_db": own.quantile_er_db,
                "least_er_db": own.least_er_db,
                "least_is_bound": own.is_bound,
                "samples": own.samples,
                "judged_s": own.judged_s,
                "calibrations": _calibrations(ledger, calibrations.get(tap.pk, [])),
            }
            for tap, own in zip(taps, figures, strict=True)
        ],
        "limits": [
            {
                "limit": one.limit.pk,
                "tap": f"{one.limit.tap.station.name}/{one.limit.tap.name}",
                "quantity": one.limit.quantity,
                "version": one.version.number,
                "alarm": one.version.alarm,
                "used": levels.get(str(one.limit.pk), one.version.alarm),
                "warning": one.version.warning,
                "from_at": one.from_at.isoformat(),
                "until_at": one.until_at.isoformat(),
                "set_by": one.version.set_by.username if one.version.set_by else None,
                "reason": one.version.reason,
            }
            for one in rulings
        ],
    }


def _calibrations(ledger: RunLedger, versions: list[Any]) -> list[dict[str, Any]]:
    """The version that held at the start and those that began in the run."""
    before = [one for one in versions if one.valid_from <= ledger.from_at][-1:]
    within = [one for one in versions if ledger.from_at < one.valid_from < ledger.until_at]
    return [
        {
            "valid_from": one.valid_from.isoformat(),
            "entered_at": one.entered_at.isoformat(),
            "entered_by": one.entered_by,
            **{name: _plain(getattr(one, name)) for name in FIELDS},
        }
        for one in (*before, *within)
    ]


def _plain(value: Any) -> Any:
    return value.isoformat() if isinstance(value, datetime) else value


def _keep(ledger: RunLedger, account: Account, facts: dict[str, Any]) -> None:
    """Write the version once: what another worker made meanwhile stays."""
    totals = totals_of(account)
    made = {
        "good_s": totals.good_s,
        "below_s": totals.below_s,
        "untrusted_s": totals.untrusted_s,
        "no_reading_s": totals.no_reading_s,
        "doubtful_s": totals.doubtful_s,
        "longest_good_s": totals.longest_good_s,
        "longest_good_from_s": totals.longest_good_from_s,
    }
    with transaction.atomic():
        RunLedger.objects.filter(pk=ledger.pk, made_at=None).update(
            **made, facts=facts, body=packed(intervals_of(account)), made_at=timezone.now(), done_share=1.0
        )
        publish({"kind": "runs", "ids": [ledger.run_id], "experiments": [ledger.run.experiment_id]})


class _Teller:
    """Writes how far the making is, about once a second, and tells the pages."""

    def __init__(self, ledger: RunLedger, taps: int) -> None:
        self.ledger, self.taps, self.next_s = ledger, max(taps, 1), time.monotonic() + TELL_EVERY_S

    def __call__(self, place: int, share: float) -> None:
        if time.monotonic() < self.next_s:
            return
        self.next_s = time.monotonic() + TELL_EVERY_S
        done = (place + share) / self.taps
        RunLedger.objects.filter(pk=self.ledger.pk, made_at=None).update(beat_at=timezone.now(), done_share=done)
        publish({"kind": "runs", "ids": [self.ledger.run_id], "experiments": [self.ledger.run.experiment_id]})
