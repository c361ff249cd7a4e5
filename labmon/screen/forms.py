"""What people fill in. Forms only read what was typed; actions check what it means."""

from typing import Any

from django import forms

from analysis.judge.rule import Quantity
from labmon.experiments.proposals import PROPOSALS
from labmon.people.models import Role


class Number(forms.FloatField):
    """A number; a decimal comma is understood."""

    widget = forms.TextInput(attrs={"inputmode": "decimal", "autocomplete": "off"})

    def to_python(self, value: Any) -> float | None:
        return super().to_python(value.replace(",", ".") if isinstance(value, str) else value)


class LimitForm(forms.Form):
    """A limit of one tap."""

    tap = forms.ChoiceField(label="Tap")
    quantity = forms.ChoiceField(
        label="Quantity",
        choices=[
            (Quantity.ER_DB.value, "Extinction ratio, dB, at least"),
            (Quantity.ANGLE_DEG.value, "Angle from the wanted state, °, at most"),
            (Quantity.DOP.value, "Degree of polarization, at least"),
            (Quantity.POWER_W.value, "Power, W, at least"),
            (Quantity.TRUSTED_SHARE.value, "Trusted share over a window, 0 to 1, at least"),
            (Quantity.TIME_TO_LIMIT_S.value, "Warning ahead: time to the limit, s, at least"),
        ],
    )
    alarm = Number(label="Alarm level")
    warning = Number(label="Warning level", required=False, help_text="Empty: no warning.")
    on_delay_s = Number(label="On-delay, s", help_text="Beyond the level so long before anyone is called.")
    off_delay_s = Number(label="Off-delay, s", help_text="Clear so long before it counts as returned.")
    deadband = Number(label="Deadband", required=False, help_text="In the quantity's unit. Empty: the usual one.")
    window_s = Number(label="Window, s", required=False,
                      help_text="Only for a trusted share (over so long) and a time to the limit (drift of so long).")
    in_runs_only = forms.BooleanField(label="Call only in declared runs", required=False)
    reason = forms.CharField(label="Reason", max_length=500, help_text="Whoever asks next month will read it.")

    def __init__(self, *args: Any, taps: list[str], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.fields["tap"].choices = [(tap, tap) for tap in taps]
        proposed = PROPOSALS[Quantity.ER_DB]
        for name in ("on_delay_s", "off_delay_s", "deadband"):
            self.fields[name].initial = f"{getattr(proposed, name):g}"

    @property
    def why_proposed(self) -> str:
        """Why the delays and the deadband stand as they do, for the quantity that is chosen."""
        chosen = self.data.get("quantity") if self.is_bound else Quantity.ER_DB.value
        return PROPOSALS[Quantity(chosen if chosen in list(PROPOSALS) else Quantity.ER_DB)].why


class FloorForm(forms.Form):
    """A lab floor of a bench or one of its taps; an empty value lifts it."""

    tap = forms.ChoiceField(label="Tap", required=False)
    quantity = forms.ChoiceField(label="Quantity", choices=LimitForm.base_fields["quantity"].choices)
    value = Number(label="Floor", required=False, help_text="In the quantity's unit. Empty: lift the floor.")
    reason = forms.CharField(label="Reason", max_length=500)

    def __init__(self, *args: Any, taps: list[str], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.fields["tap"].choices = [("", "all taps of the bench"), *((tap, tap) for tap in taps)]


class ExperimentForm(forms.Form):
    """An experiment and the taps it watches."""

    name = forms.CharField(label="Name", max_length=200)
    taps = forms.MultipleChoiceField(label="Taps it watches", help_text="Hold Ctrl or Shift to choose several.")
    no_reading_after_s = Number(label="Call after a silence of, s", required=False, help_text="Empty: 60 s.")
    untrusted_after_s = Number(label="Call after untrusted readings for, s", initial=60)

    def __init__(self, *args: Any, taps: list[str], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.fields["taps"].choices = [(tap, tap) for tap in taps]


class CalibrationForm(forms.Form):
    """A new version: empty fields keep what held before."""

    valid_from = forms.DateTimeField(label="Holds from (UTC)", help_text="Year-month-day hour:minute, e.g. 2031-03-04 02:00.")
    zero1 = Number(label="Zero of port 1", required=False)
    zero2 = Number(label="Zero of port 2", required=False)
    gain_ratio = Number(label="Gain of port 1 / port 2", required=False)
    floor1 = Number(label="Floor of port 1, 1 σ", required=False)
    floor2 = Number(label="Floor of port 2, 1 σ", required=False)
    saturation1 = Number(label="Saturation of port 1", required=False)
    saturation2 = Number(label="Saturation of port 2", required=False)
    wanted_port = forms.TypedChoiceField(
        label="Wanted port", required=False, coerce=int, empty_value=None, choices=[("", "as before"), (1, "1"), (2, "2")]
    )
    leakage = forms.CharField(
        label="Splitter leakage",
        required=False,
        help_text="Four shares a b c d: reading of port 1 = a·wanted 1 + b·wanted 2, of port 2 = c, d.",
    )
    leakage_sigma = forms.CharField(
        label="Its uncertainty, 1 σ", required=False, help_text="Four shares a b c d. Empty with a new leakage: taken as exact."
    )
    monitor_ratio = Number(label="Bright power / monitor", required=False)
    bright_nominal = Number(label="Declared bright power", required=False)
    wanted_state = forms.CharField(label="Wanted state s1 s2 s3", required=False, help_text="Three numbers with blanks between.")
    handedness = forms.ChoiceField(
        label="Handedness as sent", required=False, choices=[("", "as before"), ("optics", "optics"), ("ieee", "IEEE")]
    )
    reason = forms.CharField(label="Reason", max_length=500)

    PORTS = ("zero1", "zero2", "gain_ratio", "floor1", "floor2", "saturation1", "saturation2", "leakage", "leakage_sigma",
             "wanted_port")
    OF_KIND = {
        "two-port": PORTS,
        "dark-port": (*PORTS, "monitor_ratio", "bright_nominal"),
        "stokes": ("wanted_state", "handedness"),
        "climate": (),
    }

    def __init__(self, *args: Any, kind: str, **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        for name in [name for name in self.fields if name not in {"valid_from", "reason", *self.OF_KIND[kind]}]:
            del self.fields[name]

    def clean_wanted_state(self) -> list[float] | None:
        return _numbers(self.cleaned_data["wanted_state"], 3)

    def clean_leakage(self) -> list[list[float]] | None:
        return _matrix(self.cleaned_data["leakage"])

    def clean_leakage_sigma(self) -> list[list[float]] | None:
        return _matrix(self.cleaned_data["leakage_sigma"])

    def changes(self) -> dict[str, Any]:
        """Only what was filled in."""
        return {
            name: value
            for name, value in self.cleaned_data.items()
            if name not in {"valid_from", "reason"} and value not in (None, "")
        }


def _matrix(text: str) -> list[list[float]] | None:
    """Four numbers as rows of two."""
    numbers = _numbers(text, 4)
    return None if numbers is None else [numbers[:2], numbers[2:]]


def _numbers(text: str, count: int) -> list[float] | None:
    """``count`` numbers from text with blanks between, or None when empty."""
    if not text.strip():
        return None
    try:
        numbers = [float(word) for word in text.replace(",", " ").split()]
    except ValueError as error:
        raise forms.ValidationError(f"{text!r} are not numbers; write for example 1 0 0.") from error
    if len(numbers) != count:
        raise forms.ValidationError(f"These are {len(numbers)} numbers; {count} are wanted.")
    return numbers


class PersonForm(forms.Form):
    """A new person."""

    name = forms.CharField(label="Name to sign in with", max_length=150)
    role = forms.ChoiceField(label="Role", choices=[(role.value, role.value) for role in Role], initial=Role.RESEARCHER.value)
    email = forms.EmailField(label="Mail address", required=False, help_text="Where alarms go for owners and managers.")
    password = forms.CharField(
        label="First password",
        required=False,
        widget=forms.PasswordInput(attrs={"autocomplete": "new-password"}),
        help_text="At least 10 characters. Empty: this person uses a key only.",
    )
    guest_until = forms.DateTimeField(label="Guest until (UTC)", required=False, help_text="Only for guests.")
    guest_stations = forms.MultipleChoiceField(label="Benches a guest sees", required=False)

    def __init__(self, *args: Any, stations: list[str], **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.fields["guest_stations"].choices = [(name, name) for name in stations]
