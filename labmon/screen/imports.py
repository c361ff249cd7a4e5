"""Reading files in by hand: send the file, name its columns, look at it, read it in."""

from typing import Any, BinaryIO

from django.contrib import messages
from django.core.files.storage import default_storage
from django.http import HttpRequest, HttpResponse
from django.shortcuts import get_object_or_404, redirect, render
from django.views.decorators.http import require_http_methods

from ingest.files.faults import FileFault, MappingError
from ingest.files.guess import Proposal, propose
from ingest.files.mapping import FileLayout, Mapping, layout_of, mapping_of
from ingest.files.saved import record_import, saved_rules
from ingest.files.written import toml_of
from ingest.models import FileImport, Station, WatchedFile
from labmon.people.rights import Action, require
from labmon.pipeline.imports import begin_import, keep_upload, place_of
from labmon.screen.door import for_people
from labmon.screen.followed_view import followed_view
from labmon.screen.import_forms import ColumnsForm, FileForm, LayoutForm
from labmon.screen.import_preview import header_of, preview_of
from labmon.screen.import_summary import summary_of
from labmon.screen.import_view import first_lines, import_view, rules_shown
from labmon.screen.named import visible_station, visible_tap

LATEST_SHOWN = 20
FOLLOWED_SHOWN = 200


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def imports_page(request: HttpRequest, station: str) -> HttpResponse:
    """Choose a tap and a file; what was read in before."""
    found = _importable(request, station)
    names = list(found.taps.order_by("name").values_list("name", flat=True))
    form = FileForm(request.POST or None, request.FILES or None, taps=names, initial={"tap": request.GET.get("tap", "")})
    if request.method == "POST" and form.is_valid():
        tap = visible_tap(request.user, station, form.cleaned_data["tap"])
        record = record_import(tap, form.cleaned_data["file"].name, form.cleaned_data["file"])
        keep_upload(record, form.cleaned_data["file"])
        return redirect("import-file", station=station, import_id=record.pk)
    latest = FileImport.objects.filter(tap__station=found).select_related("tap").order_by("-pk")[:LATEST_SHOWN]
    followed = WatchedFile.objects.filter(tap__station=found).select_related("tap", "record").order_by("tap__name", "name")
    shown = {"station": found, "form": form, "imports": [import_view(record) for record in latest],
             "followed": [followed_view(one) for one in followed[:FOLLOWED_SHOWN]]}
    return render(request, "screen/imports.html", shown, status=422 if request.method == "POST" else 200)


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def import_page(request: HttpRequest, station: str, import_id: int) -> HttpResponse:
    """One file: name its columns and look at the result, or see how far it is."""
    found = _importable(request, station)
    record = get_object_or_404(FileImport.objects.select_related("tap", "tap__station"), pk=import_id, tap__station=found)
    view = import_view(record)
    if not view.is_waiting_for_mapping:
        return render(request, "screen/import_progress.html", {"station": found, "view": view})
    try:
        with default_storage.open(place_of(record), "rb") as kept:
            return _name_columns(request, found, record, kept.file)
    except FileNotFoundError:
        messages.error(request, "The upload is gone. Send the file again.")
    except FileFault as fault:
        messages.error(request, f"The file cannot be read: {fault}.")
    return redirect("imports", station=station)


def _importable(request: HttpRequest, name: str) -> Station:
    station = visible_station(request.user, name)
    require(request.user, Action.IMPORT_FILE, station)
    return station


def _name_columns(request: HttpRequest, station: Station, record: FileImport, raw: BinaryIO) -> HttpResponse:
    tap = record.tap
    proposal = propose(raw, kind=tap.kind, unit=tap.unit)
    layout, columns = _forms(request, record, raw, proposal)
    mapping = _mapping_said(layout, columns, record) if request.method == "POST" else None
    shown: dict[str, Any] = {"station": station, "record": record, "tap": tap, "layout": layout, "columns": columns,
                             "proposal": proposal, "lines": first_lines(proposal.first_lines)}
    if mapping is not None:
        try:
            shown |= {"preview": preview_of(raw, mapping, tap), "mapping_text": toml_of(mapping),
                      "summary": summary_of(raw, mapping, tap) if request.POST.get("act") != "read" else ""}
        except MappingError as error:
            _put_faults(columns, error)
        else:
            if request.POST.get("act") == "read":
                begin_import(record, mapping, by=request.user)
                return redirect("import-file", station=station.name, import_id=record.pk)
    return render(request, "screen/import_columns.html", shown, status=422 if columns.errors or layout.errors else 200)


def _forms(request: HttpRequest, record: FileImport, raw: BinaryIO, proposal: Proposal) -> tuple[LayoutForm, ColumnsForm]:
    """Both forms: as typed, else the tap's saved mapping where it fits, else the proposal."""
    rules = rules_shown(proposal.rules, saved_rules(record.tap), proposal.header)
    said = request.POST or None
    layout = LayoutForm(said, initial=LayoutForm.initial_of(rules["file"]))
    file_layout = _layout(layout) if said else layout_of(rules["file"])
    header = header_of(raw, file_layout) if file_layout else proposal.header
    columns = ColumnsForm(said, tap=record.tap, header=header, has_names=file_layout is None or file_layout.has_header,
                          initial=ColumnsForm.initial_of(rules, header))
    return layout, columns


def _layout(form: LayoutForm) -> FileLayout | None:
    """The layout as typed; None where a fault now stands in the form."""
    if not form.is_valid():
        return None
    try:
        return layout_of(form.rules())
    except MappingError as error:
        for fault in error.faults:
            form.put_fault(fault)
        return None


def _mapping_said(layout: LayoutForm, columns: ColumnsForm, record: FileImport) -> Mapping | None:
    if not (layout.is_valid() and columns.is_valid()):
        return None
    try:
        return mapping_of({"file": layout.rules()} | columns.rules(), kind=record.tap.kind, unit=record.tap.unit)
    except MappingError as error:
        _put_faults(columns, error)
        return None


def _put_faults(columns: ColumnsForm, error: MappingError) -> None:
    for fault in error.faults:
        columns.put_fault(fault)
