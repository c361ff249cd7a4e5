"""What a limit may say: checks with sentences, and the parts a default fills in."""

import math
from dataclasses import dataclass

from analysis.judge.derived import DRIFT_WINDOW_S, LONGEST_WINDOW_S, SHARE_WINDOW_S
from analysis.judge.rule import LimitRule, Quantity
from ingest.models import Tap, TapKind, Unit
from labmon.errors import WriteError
from labmon.experiments.models import LimitVersion

#: What limits may be set on.
LIMITED = tuple(Quantity)
LONGEST_DELAY_S = 7 * 86_400.0
_UNITS_WITHOUT_WATTS = frozenset({Unit.VOLT, Unit.COUNT})
_DEADBAND = {Quantity.ER_DB: 1.0, Quantity.ANGLE_DEG: 1.0, Quantity.DOP: 0.01, Quantity.TRUSTED_SHARE: 0.02,
             Quantity.TIME_TO_LIMIT_S: 1800.0}
_RANGES = {
    Quantity.ER_DB: (-100.0, 100.0),
    Quantity.ANGLE_DEG: (0.0, 180.0),
    Quantity.DOP: (0.0, 1.0),
    Quantity.POWER_W: (0.0, 1e6),
    Quantity.TRUSTED_SHARE: (0.0, 1.0),
    Quantity.TIME_TO_LIMIT_S: (60.0, LONGEST_WINDOW_S),
}
_WINDOW_STEP_S = {Quantity.TRUSTED_SHARE: 60.0, Quantity.TIME_TO_LIMIT_S: DRIFT_WINDOW_S}
_USUAL_WINDOW_S = {Quantity.TRUSTED_SHARE: SHARE_WINDOW_S, Quantity.TIME_TO_LIMIT_S: DRIFT_WINDOW_S}


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitWish:
    """A limit as a person asks for it; levels and deadband in the quantity's unit, delays in s."""

    alarm: float
    warning: float | None = None
    on_delay_s: float = 60.0
    off_delay_s: float = 60.0
    deadband: float | None = None
    window_s: float | None = None
    in_runs_only: bool = False


def rule_of(version: LimitVersion, quantity: str) -> LimitRule:
    """A stored version as the pure fold takes it."""
    return LimitRule(
        quantity=Quantity(quantity),
        alarm=version.alarm,
        warning=version.warning,
        on_delay_s=version.on_delay_s,
        off_delay_s=version.off_delay_s,
        deadband=version.deadband,
        window_s=version.window_s,
    )


def checked_quantity(quantity: str, tap: Tap) -> Quantity:
    """The quantity, if this kind of tap can give it.

    Raises:
        WriteError: It is unknown, or the tap cannot give it.
    """
    if quantity not in LIMITED:
        raise WriteError("quantity", f"{quantity!r} is no quantity.", f"Use one of {', '.join(LIMITED)}.")
    if tap.kind == TapKind.CLIMATE:
        raise WriteError("quantity", "A climate tap measures no light.", "Choose a tap that does.")
    if quantity == Quantity.DOP and tap.kind != TapKind.STOKES:
        raise WriteError(
            "quantity", "Two ports cannot tell the degree of polarization.", "Set a limit on er_db, or watch a Stokes tap."
        )
    if quantity == Quantity.POWER_W and tap.unit in _UNITS_WITHOUT_WATTS:
        raise WriteError(
            "quantity",
            f"The tap sends {tap.unit}, from which no watts follow.",
            "Set a limit on er_db or angle_deg, or let the station send W, mW, uW or dBm.",
        )
    return Quantity(quantity)


def checked_wish(quantity: Quantity, wish: LimitWish) -> LimitRule:
    """The limit's rule with defaults filled in.

    Raises:
        WriteError: A number cannot be meant: names the field.
    """
    alarm = checked_level("alarm", quantity, wish.alarm)
    warning = None if wish.warning is None else checked_level("warning", quantity, wish.warning)
    if warning is not None and (warning >= alarm if quantity.is_bad_above else warning <= alarm):
        side = "below" if quantity.is_bad_above else "above"
        raise WriteError(
            "warning",
            f"{warning:g} would never come before the alarm at {alarm:g}.",
            f"Choose a warning {side} {alarm:g}, or leave it empty.",
        )
    deadband = default_deadband(quantity, alarm) if wish.deadband is None else _not_negative("deadband", wish.deadband)
    outer = alarm if warning is None else warning
    _check_can_clear(quantity, outer, deadband)
    window_s = _window(quantity, wish.window_s)
    if quantity is Quantity.TIME_TO_LIMIT_S and outer > (window_s or 0.0):
        raise WriteError("alarm" if warning is None else "warning",
                         f"Drift over {window_s:g} s says nothing of {outer:g} s ahead.",
                         "Choose a longer window, or a level of at most the window.")
    return LimitRule(
        quantity=quantity,
        alarm=alarm,
        warning=warning,
        on_delay_s=_delay("on_delay_s", wish.on_delay_s),
        off_delay_s=_delay("off_delay_s", wish.off_delay_s),
        deadband=deadband,
        window_s=window_s,
    )


def _window(quantity: Quantity, window_s: float | None) -> float | None:
    """The time over which a derived quantity is taken, s; others have none."""
    if not quantity.is_derived:
        if window_s is not None:
            raise WriteError("window_s", f"{quantity.value} is of one sample and has no window.", "Leave it out.")
        return None
    number = _USUAL_WINDOW_S[quantity] if window_s is None else _number("window_s", window_s)
    step_s = _WINDOW_STEP_S[quantity]
    if not step_s <= number <= LONGEST_WINDOW_S or number % step_s:
        raise WriteError("window_s", f"{number:g} s is no window for {quantity.value}.",
                         f"Choose a multiple of {step_s:g} s up to {LONGEST_WINDOW_S:g} s.")
    return number


def default_deadband(quantity: Quantity, alarm: float) -> float:
    """1 dB, 1 degree, 0.01 of DOP; for power a fiftieth of the alarm level (a proposal, no source)."""
    return _DEADBAND.get(quantity, abs(alarm) / 50.0)


def _number(field: str, value: float) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not math.isfinite(value):
        raise WriteError(field, f"{value!r} is not a finite number.", "Give a number.")
    return float(value)


def checked_level(field: str, quantity: Quantity, value: float) -> float:
    """A level that can be meant for the quantity.

    Raises:
        WriteError: It is no number, or out of range.
    """
    number = _number(field, value)
    low, high = _RANGES[quantity]
    is_inside = low < number < high if quantity is Quantity.ANGLE_DEG else low <= number <= high
    if quantity in (Quantity.POWER_W, Quantity.TRUSTED_SHARE):
        is_inside = 0.0 < number <= high
    if not is_inside:
        raise WriteError(
            field, f"{number:g} is no sensible level for {quantity.value}.", f"Choose a level between {low:g} and {high:g}."
        )
    return number


def _not_negative(field: str, value: float) -> float:
    number = _number(field, value)
    if number < 0:
        raise WriteError(field, f"{number:g} is negative.", "Give 0 or more.")
    return number


def _delay(field: str, value: float) -> float:
    number = _not_negative(field, value)
    if number > LONGEST_DELAY_S:
        raise WriteError(field, f"{number:g} s is longer than a week.", "Give a delay of at most a week.")
    return number


def _check_can_clear(quantity: Quantity, level: float, deadband: float) -> None:
    if quantity in (Quantity.DOP, Quantity.TRUSTED_SHARE) and level + deadband > 1.0:
        what = "DOP" if quantity is Quantity.DOP else "share"
        raise WriteError("deadband", f"Clear would need a {what} of {level + deadband:g}.", f"Choose at most {1.0 - level:g}.")
    if quantity is Quantity.ANGLE_DEG and level - deadband <= 0.0:
        raise WriteError(
            "deadband", f"Clear would need an angle of {level - deadband:g} degrees.", f"Choose less than {level:g}."
        )
