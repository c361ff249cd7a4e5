"""Forms of runs: times as the lab's clocks show them."""

from datetime import UTC, datetime
from typing import Any
from zoneinfo import ZoneInfo

from django import forms
from django.conf import settings

from labmon.experiments.models import Experiment
from labmon.people.models import Person, Role
from labmon.screen.forms import Number

TIME_FORMATS = ["%Y-%m-%dT%H:%M", "%Y-%m-%d %H:%M", "%Y-%m-%dT%H:%M:%S", "%Y-%m-%d %H:%M:%S"]


def lab_time(typed: datetime, zone: ZoneInfo) -> datetime:
    """The moment, in UTC, that a clock of the lab shows so; of an hour that comes twice the first.

    Raises:
        ValueError: No clock of the lab shows it: it falls into the hour that is left out.
    """
    moment = typed.replace(tzinfo=zone).astimezone(UTC)
    if moment.astimezone(zone).replace(tzinfo=None) != typed:
        raise ValueError(f"{typed:%H:%M} does not happen on {typed:%d %b %Y}: the clocks go forward. Choose an hour later.")
    return moment


class RunForm(forms.Form):
    """A run as a person plans it: start and length, so that a night in which the clocks change has its true length."""

    name = forms.CharField(label="Name", max_length=200, help_text="What it is for, for example Rb scan 14.")
    starts_at = forms.CharField(label="Start", widget=forms.TextInput(attrs={"type": "datetime-local"}))
    length_h = Number(label="Length, h", help_text="From the start on; the end is shown beside the run.")
    taps = forms.MultipleChoiceField(label="Taps it relies on", widget=forms.CheckboxSelectMultiple)
    owner = forms.ChoiceField(label="Owner")
    deputy = forms.ChoiceField(label="Deputy", required=False, help_text="Called after the owner.")
    allowed_below_s = Number(label="Allowed below the limit, s", initial="0")
    wanted_trusted_pct = Number(label="Wanted with trusted readings, %", initial="95")
    reason = forms.CharField(label="Why it is changed", max_length=500, required=False)

    def __init__(self, *args: Any, experiment: Experiment, owners: list[Person], taps: list[str], is_new: bool = True,
                 is_begun: bool = False, **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.zone = settings.LAB_ZONE
        self.fields["starts_at"].help_text = f"As the lab's clocks show it ({self.zone.key})."
        self.fields["taps"].choices = [(tap, tap) for tap in taps]
        people = [(one.username, one.username) for one in Person.objects.filter(is_active=True).exclude(role=Role.GUEST)
                  .order_by("username")]
        self.fields["owner"].choices = [(one.username, one.username) for one in owners]
        self.fields["deputy"].choices = [("", "nobody"), *people]
        if is_new:
            del self.fields["reason"]
        if is_begun:
            for name in ("starts_at", "taps", "allowed_below_s", "wanted_trusted_pct"):
                del self.fields[name]

    def clean_starts_at(self) -> datetime:
        """The moment in UTC."""
        text = self.cleaned_data["starts_at"].strip()
        for form in TIME_FORMATS:
            try:
                typed = datetime.strptime(text, form)  # noqa: DTZ007
            except ValueError:
                continue
            try:
                return lab_time(typed, self.zone)
            except ValueError as fault:
                raise forms.ValidationError(str(fault)) from fault
        raise forms.ValidationError(f"“{text[:40]}” is no time. Write it as 2031-03-04 20:00.")

    def clean_length_h(self) -> float:
        """Hours, of whole seconds."""
        length = self.cleaned_data["length_h"]
        if not 0 < length <= 31 * 24:
            raise forms.ValidationError("Give more than 0 h and at most 744 h (31 days).")
        return length

    def clean_wanted_trusted_pct(self) -> float:
        """Per cent, 0 to 100."""
        share = self.cleaned_data["wanted_trusted_pct"]
        if not 0 <= share <= 100:
            raise forms.ValidationError("Give 0 to 100 %.")
        return share


class LedgerForm(forms.Form):
    """Why a ledger is made anew, and a span that is not to be used."""

    reason = forms.CharField(label="Why", max_length=500, help_text="What has changed: late readings, a zero, a gain.")
    from_at = forms.CharField(label="Not to be used from (UTC)", required=False,
                              help_text="As 2031-03-04 22:10:00. Empty: nothing is taken away.")
    until_at = forms.CharField(label="up to (UTC)", required=False)
    why = forms.CharField(label="Why it is not to be used", max_length=500, required=False)

    def clean_from_at(self) -> datetime | None:
        return _utc(self.cleaned_data["from_at"])

    def clean_until_at(self) -> datetime | None:
        return _utc(self.cleaned_data["until_at"])

    def clean(self) -> dict[str, Any]:
        """Both ends or none."""
        typed = super().clean()
        if bool(typed.get("from_at")) != bool(typed.get("until_at")) and not self.errors:
            self.add_error("until_at", "Give both ends of the span, or none.")
        return typed


def _utc(text: str) -> datetime | None:
    if not text.strip():
        return None
    for form in TIME_FORMATS:
        try:
            return datetime.strptime(text.strip(), form).replace(tzinfo=UTC)
        except ValueError:
            continue
    raise forms.ValidationError(f"“{text[:40]}” is no time. Write it as 2031-03-04 22:10:00.")
