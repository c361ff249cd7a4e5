"""What is filled in to let a bench join. Forms only read what was typed; actions check what it means."""

from typing import Any

from django import forms

from ingest.models import TapKind, Unit
from ingest.stations import NewTap
from labmon.screen.forms import Number

TAP_ROWS = 3
_KINDS = {
    TapKind.TWO_PORT: "two ports",
    TapKind.DARK_PORT: "dark port only",
    TapKind.STOKES: "polarimeter (Stokes)",
    TapKind.CLIMATE: "room air",
}
_KIND_CHOICES = [(kind.value, words) for kind, words in _KINDS.items()]
_UNIT_CHOICES = [(unit.value, unit.value.replace("uW", "µW")) for unit in Unit]


class TapForm(forms.Form):
    """One tap."""

    name = forms.CharField(label="Tap", max_length=63, help_text="Where the light is measured, e.g. eom-in.")
    kind = forms.ChoiceField(label="What is read", choices=_KIND_CHOICES)
    unit = forms.ChoiceField(label="Unit of the raw values", choices=_UNIT_CHOICES)
    interval_s = Number(label="One reading every, s", required=False, min_value=1e-4, help_text="Empty: found out.")

    def tap(self) -> NewTap:
        """What was typed; room air carries its units in the names of its columns."""
        return tap_of(self.cleaned_data)


class StationForm(forms.Form):
    """A station and its first taps."""

    name = forms.CharField(label="Name of the bench's station", max_length=63,
                           help_text="Small letters, digits and hyphens, e.g. b08. It stays.")
    room = forms.CharField(label="Room", max_length=100, required=False,
                           help_text="Benches of one room share its air and its lights.")
    owner = forms.ChoiceField(label="Owner", required=False, help_text="Who sets limits and zeros, and gets its mail.")
    purpose = forms.CharField(label="What it is for", max_length=300, required=False)

    def __init__(self, *args: Any, owners: list[str], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.fields["owner"].choices = [("", "nobody yet"), *((name, name) for name in owners)]
        self.fields["room"].widget.attrs["list"] = "rooms"
        for row in range(1, TAP_ROWS + 1):
            for name, field in TapForm.base_fields.items():
                made = type(field)(label=f"{field.label} {row}", required=False, **_options(field))
                self.fields[f"{name}{row}"] = made

    def station_fields(self) -> list[Any]:
        """The fields that are about the station itself."""
        return [self[name] for name in ("name", "room", "owner", "purpose")]

    def tap_rows(self) -> list[list[Any]]:
        """The four fields of each tap row."""
        return [[self[f"{name}{row}"] for name in TapForm.base_fields] for row in range(1, TAP_ROWS + 1)]

    def clean(self) -> dict[str, Any]:
        cleaned = super().clean()
        names = [cleaned.get(f"name{row}") for row in range(1, TAP_ROWS + 1)]
        if not any(names) and not self.errors:
            self.add_error("name1", "Name one tap at least: where on this bench is light measured?")
        return cleaned

    def taps(self) -> list[NewTap]:
        """The rows with a name."""
        return [tap_of({name: self.cleaned_data[f"{name}{row}"] for name in TapForm.base_fields})
                for row in range(1, TAP_ROWS + 1) if self.cleaned_data[f"name{row}"]]


def tap_of(typed: dict[str, Any]) -> NewTap:
    """A wish for a tap from cleaned fields."""
    unit = "" if typed["kind"] == TapKind.CLIMATE else typed["unit"]
    return NewTap(typed["name"], typed["kind"], unit, typed["interval_s"])


def _options(field: forms.Field) -> dict[str, Any]:
    if isinstance(field, forms.ChoiceField):
        return {"choices": field.choices}
    if isinstance(field, Number):
        return {"min_value": field.min_value}
    return {"max_length": field.max_length}
