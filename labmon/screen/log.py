"""The logbook of a bench: its page, one entry, one tap of the finger at the bench, and pictures."""

from typing import Any

from django.contrib import messages
from django.core.files.storage import default_storage
from django.http import Http404, HttpRequest, HttpResponse
from django.shortcuts import get_object_or_404, redirect, render
from django.utils import timezone
from django.views.decorators.http import require_http_methods, require_POST, require_safe

from ingest.models import Station
from labmon.errors import NotAllowed, WriteError
from labmon.logbook.actions import edit_entry, may_edit, say_change, strike_entry, write_entry
from labmon.logbook.authors import author_of, may_answer
from labmon.logbook.models import ChangeKind, LogEntry, LogTag
from labmon.logbook.pictures import CONTENT_TYPES
from labmon.logbook.queries import entries_visible_to, loaded, log_entries, newest_change
from labmon.people.models import Person
from labmon.people.rights import Action, may, require
from labmon.screen.door import for_people, put_refusal, say_refusal
from labmon.screen.log_forms import LogEditForm, LogForm
from labmon.screen.log_view import CHANGE_WORDS, TAG_WORDS, EntryView, entry_view, log_sentence, when_text
from labmon.screen.named import visible_run, visible_station
from labmon.screen.present import time_text

PAGE_SIZE = 50
#: A picture is shown inside nothing and runs nothing, whatever a browser takes it for.
PICTURE_HEADERS = {
    "Content-Security-Policy": "default-src 'none'; style-src 'unsafe-inline'; sandbox", "X-Content-Type-Options": "nosniff",
    "Cross-Origin-Resource-Policy": "same-origin", "Cache-Control": "private, no-store"}


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def log_page(request: HttpRequest, station: str) -> HttpResponse:
    """What people wrote about a bench, newest first, and the form for one more."""
    found = visible_station(request.user, station)
    form = _new_form(request, found)
    if request.method == "POST":
        require(request.user, Action.LOG, found)
        if form.is_valid():
            try:
                entry = _written(request.user, found, dict(form.cleaned_data))
            except WriteError as error:
                put_refusal(form, error, {"run": ""})  # its field is hidden, so it is said above the form
            else:
                messages.success(request, "Written down.")
                return redirect("log-entry", found.name, entry.pk) if entry.was_change is None else redirect("log", found.name)
    return render(request, "screen/log.html", _shown(request, found, form), status=422 if request.method == "POST" else 200)


def _new_form(request: HttpRequest, station: Station) -> LogForm:
    taps = list(station.taps.order_by("name").values_list("name", flat=True))
    initial = {"at": timezone.now().replace(microsecond=0), "tag": request.GET.get("tag", LogTag.NOTE),
               "run": _asked_run(request)}
    return LogForm(request.POST or None, request.FILES or None, taps=taps, initial=initial)


def _asked_run(request: HttpRequest) -> int | None:
    """The run that the entry is to be about: as typed, or as the address says."""
    number = request.POST.get("run") or request.GET.get("run", "")
    return int(number) if number.isascii() and number.isdigit() and len(number) < 19 else None


def _written(person: Person, station: Station, typed: dict[str, Any]) -> LogEntry:
    name, change, run_id = typed.pop("tap"), typed.pop("change"), typed.pop("run")
    tap = station.taps.select_related("station").get(name=name) if name else None
    return write_entry(station, by=person, tap=tap, change=change or None,
                       run=visible_run(person, run_id) if run_id else None, **typed)


def _shown(request: HttpRequest, station: Station, form: LogForm) -> dict[str, Any]:
    tag, before = request.GET.get("tag", ""), request.GET.get("before", "")
    tag = tag if tag in LogTag.values else ""
    rows = log_entries(request.user, stations=[station.name], tag=tag, limit=PAGE_SIZE,
                       before_id=int(before) if before.isdecimal() and len(before) < 19 else None)
    views = entry_views(request.user, rows)
    return {
        "station": station,
        "sentence": log_sentence(station.name, len(rows), newest_change(station)),
        "entries": views,
        "asking": [view for view in views if view.asks],
        "form": form,
        "run": visible_run(request.user, run_id) if (run_id := _asked_run(request)) else None,
        "may_log": may(request.user, Action.LOG, station),
        "tag": tag,
        "tags": [(one.value, TAG_WORDS[one]) for one in LogTag],
        "older": rows[-1].pk if len(rows) == PAGE_SIZE else None,
    }


def entry_views(person: Person, rows: list[LogEntry]) -> list[EntryView]:
    """Rows in words, as far as ``person`` may know who wrote them."""
    return [entry_view(row, by=author_of(row, person), may_answer=may_answer(row, person)) for row in rows]


@require_POST
@for_people
def touched_page(request: HttpRequest, station: str) -> HttpResponse:
    """"I touched the fibre": written down with this moment; the page that follows asks what it was."""
    found = visible_station(request.user, station)
    entry = write_entry(found, by=request.user, at=timezone.now(), tag=LogTag.TOUCHED)
    return redirect("log-entry", found.name, entry.pk)


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def log_entry_page(request: HttpRequest, station: str, entry_id: int) -> HttpResponse:
    """One entry with how it read before; the question whether it was a change; the form that edits it."""
    entry = _entry(request.user, station, entry_id)
    is_editable = may_edit(request.user, entry)
    if request.method == "POST" and not is_editable:
        raise NotAllowed("Only who wrote it, the bench's owner or a manager changes an entry. Write one of your own.")
    form = LogEditForm(request.POST or None, initial={name: getattr(entry, name) for name in ("text", "tag", "at", "until_at")})
    if request.method == "POST" and form.is_valid():
        try:
            edit_entry(entry, by=request.user, **form.cleaned_data)
        except WriteError as error:
            put_refusal(form, error)
        else:
            messages.success(request, "The entry is changed; how it read before stays below it.")
            return redirect("log-entry", station, entry_id)
    befores = [(when_text(one.at, one.until_at), TAG_WORDS[LogTag(one.tag)], one.text, time_text(one.edited_at))
               for one in entry.befores.order_by("-number")]
    view = entry_views(request.user, [entry])[0]
    return render(
        request,
        "screen/log_entry.html",
        {"entry": view, "station": entry.station, "befores": befores, "may_edit": is_editable, "form": form,
         "sentence": _entry_sentence(view), "kinds": [(kind.value, CHANGE_WORDS[kind]) for kind in ChangeKind]},
        status=422 if request.method == "POST" else 200,
    )


def _entry_sentence(view: EntryView) -> str:
    if view.asks:
        return f"Noted: {view.tag} at {view.when[11:]} UTC. Is {view.station} still as it was?"
    return f"{view.station}, {view.when} UTC: {view.tag}" + (f", configuration changed ({view.change})." if view.change else ".")


@require_POST
@for_people
def say_change_page(request: HttpRequest, station: str, entry_id: int) -> HttpResponse:
    """The answer: what changed, or that nothing did."""
    entry = _entry(request.user, station, entry_id)
    kind = request.POST.get("kind", "")
    try:
        say_change(entry, kind or None, by=request.user)
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, "Noted as a configuration change: what was measured before no longer speaks for the bench."
                         if kind else "Noted: the bench is as it was.")
    return redirect("station", station)


@require_POST
@for_people
def strike_page(request: HttpRequest, station: str, entry_id: int) -> HttpResponse:
    """Strike an entry out."""
    strike_entry(_entry(request.user, station, entry_id), by=request.user)
    messages.success(request, "Struck out. It stays readable, and plots and clearances pass it over.")
    return redirect("log", station)


@require_safe
@for_people
def picture_page(request: HttpRequest, station: str, entry_id: int) -> HttpResponse:
    """An entry's picture, as labmon redrew it."""
    name = _entry(request.user, station, entry_id).picture.name
    kind = CONTENT_TYPES.get(name[-4:]) if name else None
    if kind is None or not default_storage.exists(name):
        raise Http404("There is no picture.")
    with default_storage.open(name) as kept:
        body = kept.read()
    return HttpResponse(body, content_type=kind, headers=PICTURE_HEADERS | {
        "Content-Disposition": f'inline; filename="{station}-log-{entry_id}{name[-4:]}"'})


def _entry(person: Person, station: str, entry_id: int) -> LogEntry:
    return get_object_or_404(loaded(entries_visible_to(person)), station__name=station, pk=entry_id)
