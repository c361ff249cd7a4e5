"""The import page's forms: what the person says becomes the rules of a mapping, and a fault goes to its field."""

from typing import Any

from django import forms

from ingest.files.columns import COLUMNS, NEEDED
from ingest.files.faults import MappingFault
from ingest.files.mapping import COUNTED, DELIMITERS, TURN_BACK
from ingest.files.units import units_for
from ingest.models import Tap
from labmon.screen.forms import Number

LARGEST_FILE_MB = 200
OWN_CODES = "own"
_WORD_OF = {sign: word for word, sign in DELIMITERS.items()}
_FORMATS = [("iso", "2031-03-04 12:00:00 (ISO 8601)"), *((name, f"number of {name}") for name in COUNTED),
            (OWN_CODES, "date codes, below")]


class FileForm(forms.Form):
    """Which file, for which tap."""

    tap = forms.ChoiceField(label="Tap")
    file = forms.FileField(label="File", allow_empty_file=True, help_text=(
        f"A table of text, one line a reading; may be packed with gzip; at most {LARGEST_FILE_MB} MB."))

    def __init__(self, *args: Any, taps: list[str], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.fields["tap"].choices = [(tap, tap) for tap in taps]

    def clean_file(self) -> Any:
        file = self.cleaned_data["file"]
        if file.size > LARGEST_FILE_MB * 1_000_000:
            raise forms.ValidationError(f"The file has {file.size / 1e6:.0f} MB, {LARGEST_FILE_MB} MB are taken here. "
                                        "Pack it with gzip, cut it in parts, or use manage.py import_csv.")
        if not file.size:
            raise forms.ValidationError("The file is empty. Choose the file with the readings.")
        return file


class LayoutForm(forms.Form):
    """How the text is cut; the [file] part of a mapping."""

    delimiter = forms.ChoiceField(label="Between cells", choices=[(word, word) for word in DELIMITERS])
    decimal = forms.ChoiceField(label="Decimal sign", choices=[(".", "point"), (",", "comma")])
    encoding = forms.CharField(label="Encoding", max_length=40)
    skip_lines = forms.IntegerField(label="Lines before the names", min_value=0, max_value=100_000)
    header = forms.BooleanField(label="There is a line of names", required=False)
    skip_after_header = forms.IntegerField(label="Lines after the names, before the readings", min_value=0, max_value=100_000)
    comment = forms.CharField(label="Comment lines begin with", required=False, max_length=10)
    missing = forms.CharField(label="Marks for “no value”", required=False, max_length=200,
                              help_text="Yours, with blanks between, e.g. -99.99 n/a")

    @staticmethod
    def initial_of(rules: dict[str, Any]) -> dict[str, Any]:
        """What the form shows for a [file] table."""
        shown = {"delimiter": ",", "decimal": ".", "encoding": "utf-8", "skip_lines": 0, "header": True,
                 "skip_after_header": 0, "comment": ""} | rules
        return shown | {"delimiter": _WORD_OF.get(shown["delimiter"], shown["delimiter"]),
                        "missing": " ".join(rules.get("missing", []))}

    def rules(self) -> dict[str, Any]:
        """The [file] table."""
        return self.cleaned_data | {"missing": self.cleaned_data["missing"].split()}

    def put_fault(self, fault: MappingFault) -> None:
        """Show a fault of the [file] table at its field."""
        self.add_error(fault.key.removeprefix("file."), fault_words(fault))


class ColumnsForm(forms.Form):
    """When a line was taken and what its cells are; the [time] and [columns] parts."""

    time1 = forms.ChoiceField(label="Time column")
    time2 = forms.ChoiceField(label="and, joined by a blank", required=False)
    format = forms.ChoiceField(label="Written as", choices=_FORMATS)
    codes = forms.CharField(label="Date codes", required=False, max_length=60, help_text="e.g. %d.%m.%Y %H:%M:%S.%f")
    zone = forms.CharField(label="Zone of the clock", required=False, max_length=60, help_text=(
        "e.g. UTC, Europe/Berlin, +01:00. Never guessed; not needed where each time has its own."))
    since = forms.CharField(label="The count began at", required=False, max_length=40, help_text=(
        "e.g. 2031-03-04T12:00:00+01:00. For counted times; each file has its own."))
    at_turn_back = forms.ChoiceField(label="An hour that happened twice is", choices=[(word, word) for word in TURN_BACK],
                                     help_text="When clocks were turned back in autumn.")

    def __init__(self, *args: Any, tap: Tap, header: list[str], has_names: bool, **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self._header, self._has_names = header, has_names
        self._ours = COLUMNS[tap.kind]
        columns = [(str(place), f"{place}: {name}" if has_names else f"column {place}") for place, name in enumerate(header, 1)]
        self.fields["time1"].choices = [("", "choose"), *columns]
        self.fields["time2"].choices = [("", "–"), *columns]
        for ours in self._ours:
            self.fields[f"{ours}-column"] = forms.ChoiceField(label=ours, required=False, choices=[("", "–"), *columns])
            self.fields[f"{ours}-unit"] = forms.ChoiceField(label=f"unit of {ours}", required=False, choices=[
                (unit, unit) for unit in units_for(ours, tap.unit)])
            self.fields[f"{ours}-factor"] = Number(label=f"factor of {ours}", required=False)
        self._needed = set().union(*NEEDED[tap.kind])

    def time_fields(self) -> list[Any]:
        """The fields of [time], as the template draws them."""
        return [self[name] for name in ("time1", "time2", "format", "codes", "zone", "since", "at_turn_back")]

    def column_rows(self, *, is_needed: bool) -> list[tuple[str, Any, Any, Any]]:
        """Ours, then its three fields; first those that a reading needs."""
        return [(ours, self[f"{ours}-column"], self[f"{ours}-unit"], self[f"{ours}-factor"]) for ours in self._ours
                if (ours in self._needed) == is_needed]

    def needed_rows(self) -> list[tuple[str, Any, Any, Any]]:
        return self.column_rows(is_needed=True)

    def other_rows(self) -> list[tuple[str, Any, Any, Any]]:
        return self.column_rows(is_needed=False)

    @staticmethod
    def initial_of(rules: dict[str, Any], header: list[str]) -> dict[str, Any]:
        """What the form shows for [time] and [columns] tables."""
        time = rules.get("time", {})
        places = [_place(source, header) for source in time.get("columns", [])] + ["", ""]
        codes = time.get("format", "iso")
        is_named = codes == "iso" or codes in COUNTED
        shown = {"time1": places[0], "time2": places[1], "format": codes if is_named else OWN_CODES,
                 "codes": "" if is_named else codes, "since": time.get("since", ""), "zone": time.get("zone", ""),
                 "at_turn_back": time.get("at_turn_back", "set aside")}
        for ours, rule in rules.get("columns", {}).items():
            factor = rule.get("factor", 1.0)
            shown |= {f"{ours}-column": _place(rule["column"], header), f"{ours}-unit": rule.get("unit", ""),
                      f"{ours}-factor": "" if factor == 1.0 else repr(factor)}
        return shown

    def rules(self) -> dict[str, Any]:
        """The [time] and [columns] tables."""
        said = self.cleaned_data
        time = {"columns": [self._source(said[name]) for name in ("time1", "time2") if said[name]],
                "format": said["codes"] if said["format"] == OWN_CODES else said["format"], "at_turn_back": said["at_turn_back"]}
        time |= {key: said[key] for key in ("since", "zone") if said[key]}
        return {"time": time, "columns": {ours: self._column_rule(ours) for ours in self._ours if said[f"{ours}-column"]}}

    def _column_rule(self, ours: str) -> dict[str, Any]:
        column, unit, factor = (self.cleaned_data[f"{ours}-{part}"] for part in ("column", "unit", "factor"))
        rule = {"column": self._source(column), "unit": unit, "factor": factor}
        return {key: value for key, value in rule.items() if value not in ("", None)}

    def put_fault(self, fault: MappingFault) -> None:
        """Show a mapping's fault at the field it is about."""
        parts = fault.key.split(".")
        format_field = "codes" if self.cleaned_data.get("format") == OWN_CODES else "format"
        name = {"time.format": format_field, "time.since": "since", "time.zone": "zone", "time.column": "time1",
                "time.columns": "time1"}.get(fault.key)
        if parts[0] == "columns" and len(parts) > 1:
            name = f"{parts[1]}-{parts[2] if parts[2:3] in (['unit'], ['factor']) else 'column'}"
        self.add_error(name if name in self.fields else None, fault_words(fault))

    def _source(self, place: str) -> str | int:
        """A column's name where it has one of its own, so that the mapping outlives a changed order; else its number."""
        name = self._header[int(place) - 1]
        return name if self._has_names and name and self._header.count(name) == 1 else int(place)


def fault_words(fault: MappingFault) -> str:
    """Why and what to do, as a sentence."""
    return f"{fault.why[:1].upper()}{fault.why[1:]}; {fault.do}."


def _place(source: str | int, header: list[str]) -> str:
    if isinstance(source, int):
        return str(source)
    return str(header.index(source) + 1) if source in header else ""
