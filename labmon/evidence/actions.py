"""Asking for a package, and noting that somebody fetched it: the only writers of people's part."""

from django.db import transaction
from django.db.models import Max, Sum

from ingest.models import Block, DayFile, InboxRow
from ingest.times import us_of
from labmon.audit.actions import note
from labmon.errors import WriteError
from labmon.evidence.models import RunEvidence
from labmon.people.models import Person
from labmon.runs.models import Run, RunLedger


@transaction.atomic
def ask_evidence(ledger: RunLedger, *, by: Person | None) -> RunEvidence:
    """Ask for the package of a made version of a run's ledger.

    Raises:
        WriteError: The version is not made, or a package of the run is being made.
    """
    run = Run.objects.select_for_update(of=("self",)).get(pk=ledger.run_id)
    if ledger.made_at is None:
        raise WriteError("ledger", "This version of the ledger is not made yet.", "Wait until it is there.")
    if run.evidence.filter(made_at=None, fault="").exists():
        raise WriteError("evidence", "A package of this run is being made.", "Wait until it is there.")
    number = (run.evidence.aggregate(last=Max("number"))["last"] or 0) + 1
    evidence = RunEvidence.objects.create(run=run, ledger=ledger, number=number, asked_by=by, rows_total=_rows_about(ledger))
    note(by, "make evidence", run, None, {"ledger": ledger.number, "evidence": number}, as_name="labmon")
    return evidence


@transaction.atomic
def note_export(evidence: RunEvidence, *, by: Person | None, form: str) -> None:
    """The audit keeps who took a package, or its report, out of the house."""
    note(by, "export evidence", evidence.run, None, {"evidence": evidence.number, "form": form, "sha256": evidence.sha256})


def _rows_about(ledger: RunLedger) -> int:
    """About how many readings it will have, for the progress bar: whole stored rows are counted."""
    from_us, until_us = us_of(ledger.from_at), us_of(ledger.until_at)
    taps = list(ledger.run.taps.values_list("pk", flat=True))
    touching = {"tap__in": taps, "last_at_us__gte": from_us, "first_at_us__lt": until_us}
    counts = [rows.objects.filter(**touching).aggregate(sum=Sum("count"))["sum"] for rows in (Block, InboxRow, DayFile)]
    return sum(count or 0 for count in counts)
