"""What people write in the logbook."""

from typing import Any

from django import forms

from labmon.logbook.models import ChangeKind, LogTag
from labmon.screen.log_view import CHANGE_WORDS, TAG_WORDS

_MOMENT = "%Y-%m-%d %H:%M:%S"


class LogEditForm(forms.Form):
    """The words and times of an entry."""

    text = forms.CharField(
        label="What happened", required=False, max_length=4000, widget=forms.Textarea(attrs={"rows": 3})
    )
    tag = forms.ChoiceField(label="About", choices=[(tag.value, TAG_WORDS[tag]) for tag in LogTag])
    at = forms.DateTimeField(label="At (UTC)", widget=forms.DateTimeInput(format=_MOMENT))
    until_at = forms.DateTimeField(
        label="Until (UTC)", required=False, widget=forms.DateTimeInput(format=_MOMENT), help_text="Empty: a moment, no span."
    )


class LogForm(LogEditForm):
    """A new entry."""

    tap = forms.ChoiceField(label="Tap", required=False)
    change = forms.ChoiceField(
        label="Did the bench's configuration change?",
        required=False,
        choices=[("", "no"), *((kind.value, f"yes: {CHANGE_WORDS[kind]}") for kind in ChangeKind)],
        help_text="Yes: what was measured before no longer speaks for the bench.",
    )
    picture = forms.FileField(
        label="Picture", required=False, help_text="JPEG, PNG or WebP, at most 12 MiB. Place and time inside it are dropped.",
        widget=forms.ClearableFileInput(attrs={"accept": "image/jpeg,image/png,image/webp"}),
    )
    run = forms.IntegerField(required=False, min_value=1, widget=forms.HiddenInput)
    field_order = ["text", "tag", "change", "at", "until_at", "tap", "picture"]

    def __init__(self, *args: Any, taps: list[str], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.fields["tap"].choices = [("", "the whole bench"), *((tap, tap) for tap in taps)]
