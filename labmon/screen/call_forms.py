"""What people fill in about calls. Forms only read what was typed; actions check what it means."""

import re
from typing import Any

from django import forms

from labmon.screen.event_view import WEEKDAYS
from labmon.screen.forms import Number

_TIME = re.compile(r"([01]?\d|2[0-3])[:.]([0-5]\d)")


class TimeOfDay(forms.CharField):
    """A time such as 22:00, in minutes of the day."""

    widget = forms.TextInput(attrs={"inputmode": "numeric", "autocomplete": "off"})

    def clean(self, value: Any) -> int | None:
        text = super().clean(value).strip()
        if not text:
            return None
        found = _TIME.fullmatch(text)
        if found is None:
            raise forms.ValidationError(f"{text!r} is no time of day. Write it as 22:00.")
        return int(found[1]) * 60 + int(found[2])


class OnCallForm(forms.Form):
    """Someone on call for a time."""

    person = forms.ChoiceField(label="Who")
    from_at = forms.DateTimeField(label="From (UTC)")
    until_at = forms.DateTimeField(label="Until (UTC)", help_text="Year-month-day hour:minute, e.g. 2031-03-10 08:00.")

    def __init__(self, *args: Any, people: list[str], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.fields["person"].choices = [(one, one) for one in people]


class RulesForm(forms.Form):
    """The lab's rules of calling."""

    remind_after_min = Number(label="Remind, and tell the next, after so many minutes")
    drill_weekday = forms.ChoiceField(
        label="Weekly drill", required=False, choices=[("", "none"), *((str(one), day) for one, day in enumerate(WEEKDAYS))]
    )
    drill_hour = forms.IntegerField(label="Drill at hour (UTC)", min_value=0, max_value=23)


class WebhookForm(forms.Form):
    """An address that is posted every event."""

    name = forms.CharField(label="Name", max_length=100)
    url = forms.CharField(label="Address", max_length=500, widget=forms.URLInput(attrs={"autocomplete": "off"}))


class QuietHoursForm(forms.Form):
    """When someone is not to be called."""

    from_minute = TimeOfDay(label="From", required=False, help_text="Such as 22:00.")
    until_minute = TimeOfDay(label="Until", required=False, help_text="Such as 07:00. Both empty: never quiet.")
    zone = forms.CharField(label="Time zone", required=False, max_length=64, help_text="Such as Europe/Berlin. Empty: UTC.")


class SharedForm(forms.Form):
    """What a bench shares with others."""

    room = forms.CharField(label="Room", required=False, max_length=100)
    laser = forms.CharField(label="Laser", required=False, max_length=100, help_text="The laser that feeds it.")
    logger = forms.CharField(label="Logger", required=False, max_length=100, help_text="The computer or board that reads it.")
    network = forms.CharField(label="Network", required=False, max_length=100, help_text="The network its readings travel on.")
