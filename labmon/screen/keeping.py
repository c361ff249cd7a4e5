"""How long raw readings are kept, for managers: what holds, what it keeps, and a new rule with a word on what it deletes."""

from collections.abc import Sequence
from typing import Any

from django import forms
from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.views.decorators.http import require_http_methods

from ingest.models import KeepRule, Tap
from labmon.benches.keeping import end_keep_rule, rule_text, set_keep_rule
from labmon.benches.kept import TapKept, WouldGo, taps_kept, would_go
from labmon.errors import WriteError
from labmon.people.models import Person
from labmon.people.rights import Action, require
from labmon.screen.door import for_people, put_refusal
from labmon.screen.health import size_text
from labmon.screen.present import MISSING, count_text

LAB = "lab"
DAYS, FOR_EVER, AS_THE_LAB = "days", "for-ever", "as-the-lab"


class KeepForm(forms.Form):
    """A new rule."""

    whose = forms.ChoiceField(label="Of", help_text="The lab: every tap without a rule of its own.")
    how = forms.ChoiceField(label="Keep raw readings", choices=[
        (DAYS, "for days"), (FOR_EVER, "for ever"), (AS_THE_LAB, "as the lab")], help_text="As the lab: ends a tap's own rule.")
    raw_days = forms.IntegerField(label="Days, at least", required=False, min_value=1,
                                  widget=forms.TextInput(attrs={"inputmode": "numeric"}))
    reason = forms.CharField(label="Reason", max_length=500, help_text="Goes into the audit.")

    def __init__(self, *args: Any, taps: Sequence[TapKept], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        lab = (LAB, "the lab")
        self.fields["whose"].choices = [lab, *((one.name, one.name) for one in taps)]

    def clean(self) -> dict[str, Any]:
        typed = super().clean() or {}
        if typed.get("how") == DAYS and typed.get("raw_days") is None and "raw_days" not in self.errors:
            self.add_error("raw_days", "Say how many days, or keep them for ever.")
        if typed.get("how") == AS_THE_LAB and typed.get("whose") == LAB:
            self.add_error("how", "The lab's rule is a number of days, or for ever.")
        return typed


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def keeping_page(request: HttpRequest) -> HttpResponse:
    """What holds now; a rule that would delete something asks once more."""
    require(request.user, Action.SET_KEEPING)
    lab, rows = taps_kept()
    form = KeepForm(request.POST or None, taps=rows)
    going = None
    if request.method == "POST" and form.is_valid():
        tap = _tap(form.cleaned_data["whose"])
        going = _going(tap, form.cleaned_data)
        if not going.days or request.POST.get("is_known") == "on":
            try:
                messages.success(request, _set(tap, form.cleaned_data, request.user))
            except WriteError as error:
                put_refusal(form, error)
            else:
                return redirect("keeping")
    shown = {
        "sentence": sentence(lab, rows), "form": form, "going": going_text(going) if going is not None and going.days else "",
        "rows": [row_of(one, lab) for one in rows],
    }
    return render(request, "screen/keeping.html", shown, status=422 if request.method == "POST" else 200)


def _tap(whose: str) -> Tap | None:
    if whose == LAB:
        return None
    station, _, name = whose.partition("/")
    return Tap.objects.select_related("station").get(station__name=station, name=name)


def _going(tap: Tap | None, typed: dict[str, Any]) -> WouldGo:
    return would_go(tap, typed["raw_days"] if typed["how"] == DAYS else None, ends_own=typed["how"] == AS_THE_LAB)


def _set(tap: Tap | None, typed: dict[str, Any], by: Person) -> str:
    if typed["how"] == AS_THE_LAB and tap is not None:
        end_keep_rule(tap, by=by, reason=typed["reason"])
        return f"{tap.station.name}/{tap.name} follows the lab's rule."
    rule = set_keep_rule(tap, typed["raw_days"] if typed["how"] == DAYS else None, by=by, reason=typed["reason"])
    return f"Now {rule_text(rule)}."


def sentence(lab: KeepRule | None, rows: Sequence[TapKept]) -> str:
    """What holds, in one sentence."""
    own = sum(one.rule is not None for one in rows)
    said = f"Raw readings are kept {_days_text(lab)}"
    if own:
        said += f"; {count_text(own, 'tap')} {'has' if own == 1 else 'have'} a rule of {'its' if own == 1 else 'their'} own"
    return f"{said}."


def going_text(going: WouldGo) -> str:
    """What would be deleted, before it is."""
    since = f" from {going.oldest_at:%Y-%m-%d} on" if going.oldest_at else ""
    days = count_text(going.days, "day of a tap", "days of taps")
    return (f"Under this rule {days}{since} ({size_text(going.size)}) would be deleted in the coming night, at "
            "02:40 UTC, and can only come back from a backup. Rollups, alarms and the audit stay.")


def row_of(one: TapKept, lab: KeepRule | None) -> tuple[str, str, str, str, str, str]:
    """Tap, rule, since when raw is held, readings, room, days no longer kept."""
    rule = f"{_days_text(one.rule)}, set by {one.rule.set_by}" if one.rule else f"as the lab: {_days_text(lab)}"
    since = one.oldest_at.strftime("%Y-%m-%d") if one.oldest_at else MISSING
    return one.name, rule, since, f"{one.readings:,}", size_text(one.size), str(one.forgotten) if one.forgotten else MISSING


def _days_text(rule: KeepRule | None) -> str:
    return "for ever" if rule is None or rule.raw_days is None else f"at least {count_text(rule.raw_days, 'day')}"
