"""Evidence packages of a run: make one, see how far it is, take it."""

import base64
import hashlib
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from django.contrib import messages
from django.http import Http404, HttpRequest, HttpResponse, HttpResponseBase, StreamingHttpResponse
from django.shortcuts import redirect, render
from django.views.decorators.http import require_http_methods, require_safe

from labmon.api.readings import for_server
from labmon.errors import WriteError
from labmon.evidence.actions import ask_evidence, note_export
from labmon.evidence.files import place_of
from labmon.evidence.inside import file_within, has_pdf
from labmon.evidence.models import RunEvidence
from labmon.evidence.tasks import ask_worker
from labmon.people.rights import Action, require
from labmon.runs.ledgers import newest_ledger
from labmon.runs.models import Run
from labmon.screen.door import for_people, say_refusal
from labmon.screen.named import visible_run
from labmon.screen.present import time_text

STYLE = re.compile(r"<style>(.*?)</style>", re.DOTALL)


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def evidence_page(request: HttpRequest, run_id: int) -> HttpResponse:
    """What there is, what is being made, and the button that makes it."""
    run = _exportable(request, run_id)
    ledger = newest_ledger(run)
    if request.method == "POST":
        try:
            if ledger is None:
                raise WriteError("ledger", "This run has no ledger yet.", "It is made two minutes after the run's end.")
            made = ask_evidence(ledger, by=request.user)
        except WriteError as error:
            say_refusal(request, error)
        else:
            ask_worker()
            messages.success(request, f"Package {made.number} is being made. It goes on when you leave this page.")
        return redirect("evidence", run_id=run.pk)
    rows = [_row(one) for one in run.evidence.select_related("ledger", "asked_by").order_by("-number")]
    return render(request, "screen/evidence.html", {
        "run": run, "ledger": ledger, "packages": rows, "sentence": _sentence(run, ledger is not None, rows),
        "is_in_work": any(row["is_in_work"] for row in rows)})


@require_safe
@for_people
def evidence_zip(request: HttpRequest, run_id: int, number: int) -> HttpResponseBase:
    """The package."""
    evidence = _made(request, run_id, number)
    path = place_of(evidence)
    if not path.is_file():
        raise Http404("The package's file is gone from the data folder. Make a new one.")
    note_if_taken(request, evidence, "package")
    return StreamingHttpResponse(for_server(request, _parts(path)), content_type="application/zip", headers={
        "Content-Disposition": f'attachment; filename="{path.name}"', "Content-Length": str(path.stat().st_size)})


@require_safe
@for_people
def evidence_report(request: HttpRequest, run_id: int, number: int) -> HttpResponse:
    """The report within, to be read and printed; its one style sheet is let in by its digest."""
    evidence = _made(request, run_id, number)
    page = _within(evidence, "data/report.html").decode()
    found = STYLE.search(page)
    digest = base64.b64encode(hashlib.sha256((found.group(1) if found else "").encode()).digest()).decode()
    note_if_taken(request, evidence, "report")
    return HttpResponse(page, headers={
        "Content-Security-Policy": f"default-src 'none'; style-src 'sha256-{digest}'; base-uri 'none'; frame-ancestors 'none'"})


@require_safe
@for_people
def evidence_pdf(request: HttpRequest, run_id: int, number: int) -> HttpResponse:
    """The same as PDF, where the package has one."""
    evidence = _made(request, run_id, number)
    content = _within(evidence, "data/report.pdf")
    note_if_taken(request, evidence, "PDF")
    name = f"{place_of(evidence).stem}-report.pdf"
    return HttpResponse(content, content_type="application/pdf", headers={"Content-Disposition": f'inline; filename="{name}"'})


def note_if_taken(request: HttpRequest, evidence: RunEvidence, form: str) -> None:
    """Asking for the headers alone takes nothing out."""
    if request.method != "HEAD":
        note_export(evidence, by=request.user, form=form)


def _exportable(request: HttpRequest, run_id: int) -> Run:
    run = visible_run(request.user, run_id)
    require(request.user, Action.EXPORT, run.experiment)
    return run


def _made(request: HttpRequest, run_id: int, number: int) -> RunEvidence:
    made = _exportable(request, run_id).evidence.filter(number=number).exclude(made_at=None)
    found = made.select_related("run", "ledger").first()
    if found is None:
        raise Http404("This run has no such package.")
    return found


def _parts(path: Path) -> Iterator[bytes]:
    """The file piece by piece, opened when the first is asked for."""
    with path.open("rb") as file:
        while part := file.read(1 << 20):
            yield part


def _within(evidence: RunEvidence, name: str) -> bytes:
    try:
        content = file_within(evidence, name)
    except FileNotFoundError:
        raise Http404("The package's file is gone from the data folder. Make a new one.") from None
    if content is None:
        raise Http404("This package has no such file. Print the report from the browser.")
    return content


def _row(one: RunEvidence) -> dict[str, Any]:
    return {"number": one.number, "version": one.ledger.number, "fault": one.fault, "is_made": one.made_at is not None,
            "is_in_work": one.made_at is None and not one.fault, "done": min(one.rows_done, one.rows_total),
            "total": one.rows_total or 1,
            "made": time_text(one.made_at) if one.made_at else "", "by": one.asked_by.username if one.asked_by else "labmon",
            "size": f"{one.size / 1e6:.1f} MB" if one.size else "", "sha256": one.sha256,
            "has_pdf": one.made_at is not None and has_pdf(one)}


def _sentence(run: Run, has_ledger: bool, rows: list[dict[str, Any]]) -> str:
    if any(row["is_in_work"] for row in rows):
        return f"Evidence of {run.name} is being made."
    made = sum(row["is_made"] for row in rows)
    if made:
        return f"Evidence of {run.name}: {made} package{'s' if made > 1 else ''} to take."
    if has_ledger:
        return f"No evidence of {run.name} yet."
    return f"{run.name} has no ledger yet, so there is nothing to give evidence of."
