"""Versions of a tap's calibration: the only writer, and reading by valid time and entry time."""

import math
from collections.abc import Iterable
from datetime import datetime
from typing import Any

from django.db import transaction

from analysis.models import Calibration, RollupDue
from ingest.models import Tap, TapHeard, TapKind, Touch
from ingest.times import us_of

#: Fields a version may set; the rest of the row says when and by whom.
FIELDS = (
    "zero1",
    "zero2",
    "zero1_error",
    "zero2_error",
    "zero_taken_at",
    "gain_ratio",
    "floor1",
    "floor2",
    "saturation1",
    "saturation2",
    "leakage",
    "leakage_sigma",
    "wanted_port",
    "monitor_ratio",
    "bright_nominal",
    "wanted_state",
    "handedness",
)
_NUMBERS = frozenset(FIELDS) - {"zero_taken_at", "leakage", "leakage_sigma", "wanted_port", "wanted_state", "handedness"}
_MAY_BE_NULL = frozenset(
    {"zero1_error", "zero2_error", "zero_taken_at", "saturation1", "saturation2", "leakage", "leakage_sigma", "monitor_ratio",
     "bright_nominal", "wanted_state"}
)
_ABOVE_ZERO = frozenset({"gain_ratio", "saturation1", "saturation2", "monitor_ratio", "bright_nominal"})
#: A leakage matrix whose determinant is this small beside its entries cannot be undone with any meaning.
LEAST_DETERMINANT = 1e-6


class CalibrationError(ValueError):
    """A field that cannot be part of a calibration: which, why, and what to do."""

    def __init__(self, field: str, why: str, do: str):
        super().__init__(f"{field}: {why} {do}")
        self.field, self.why, self.do = field, why, do


@transaction.atomic
def new_version(tap: Tap, valid_from: datetime, changes: dict[str, Any], by: str = "") -> Calibration:
    """Enter a version: fields not in ``changes`` are taken from the version valid at ``valid_from``.

    It holds until the next version's ``valid_from``. What was derived in that span is due to be made anew: the
    rollups, and the past episodes (for display, nobody is called).
    Raises:
        CalibrationError: A field is unknown or its value cannot be meant.
    """
    if tap.kind == TapKind.CLIMATE:
        raise CalibrationError("tap", "A climate tap has no optical calibration.", "Choose a tap that measures light.")
    checked = {field: _checked(field, value) for field, value in changes.items()}
    Tap.objects.select_for_update(of=("self",)).get(pk=tap.pk)
    before = version_at(tap.pk, valid_from)
    kept = {field: getattr(before, field) for field in FIELDS} if before else {}
    if {"zero1", "zero2"} & checked.keys():
        checked.setdefault("zero_taken_at", valid_from)
    for port in ("zero1", "zero2"):
        if port in checked:
            checked.setdefault(f"{port}_error", None)  # another zero has not the error of the one before
    if "leakage" in checked:
        checked.setdefault("leakage_sigma", None)
    version = Calibration.objects.create(tap=tap, valid_from=valid_from, entered_by=by, **kept | checked)
    mark_derived_due(tap.pk, valid_from)
    return version


def mark_derived_due(tap_id: int, from_at: datetime) -> None:
    """Rollups and episodes from ``from_at`` to the next version (at most to the newest reading) are to be made anew."""
    heard = TapHeard.objects.filter(tap_id=tap_id).first()
    following = Calibration.objects.filter(tap_id=tap_id, valid_from__gt=from_at).order_by("valid_from").first()
    first_us = us_of(from_at)
    last_us = min(us_of(following.valid_from) - 1 if following else heard.last_at_us, heard.last_at_us) if heard else first_us - 1
    if heard:
        mark_span_due(heard, first_us, last_us)


def mark_span_due(heard: TapHeard, first_us: int, last_us: int) -> None:
    """What was derived of a tap's readings of a span is to be made anew; an empty span leaves no mark."""
    if first_us <= last_us:
        RollupDue.objects.create(tap_id=heard.tap_id, first_at_us=first_us, last_at_us=last_us)
        Touch.objects.create(tap_id=heard.tap_id, first_at_us=first_us, last_at_us=last_us, arrival_us=heard.last_arrival_us)


def version_at(tap_id: int, at: datetime, as_of: datetime | None = None) -> Calibration | None:
    """The version that held at ``at``, by what was known at ``as_of`` (now if left out); None before the first."""
    versions = Calibration.objects.filter(tap_id=tap_id, valid_from__lte=at)
    if as_of is not None:
        versions = versions.filter(entered_at__lte=as_of)
    return versions.order_by("-valid_from", "-entered_at", "-pk").first()


def versions_of(tap_ids: Iterable[int], as_of: datetime | None = None) -> dict[int, list[Calibration]]:
    """For each tap its versions in force, oldest first, one per ``valid_from`` (the later entered one)."""
    versions = Calibration.objects.filter(tap_id__in=list(tap_ids))
    if as_of is not None:
        versions = versions.filter(entered_at__lte=as_of)
    found: dict[int, dict[datetime, Calibration]] = {}
    for version in versions.order_by("tap_id", "valid_from", "entered_at", "pk"):
        found.setdefault(version.tap_id, {})[version.valid_from] = version
    return {tap_id: list(by_time.values()) for tap_id, by_time in found.items()}


def _checked(field: str, value: Any) -> Any:
    if field not in FIELDS:
        raise CalibrationError(field, "A calibration has no such field.", f"Use one of {', '.join(FIELDS)}.")
    if value is None:
        if field not in _MAY_BE_NULL:
            raise CalibrationError(field, "It cannot be empty.", "Give a value, or leave the field out to keep the present one.")
        return None
    if field in _NUMBERS:
        return _checked_number(field, value)
    return {
        "leakage": _checked_leakage,
        "leakage_sigma": _checked_leakage_sigma,
        "wanted_state": _checked_state,
        "wanted_port": _checked_port,
        "handedness": _checked_handedness,
        "zero_taken_at": _checked_time,
    }[field](value)


def _number(field: str, value: Any) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not math.isfinite(value):
        raise CalibrationError(field, f"{value!r} is not a finite number.", "Give a number in the tap's raw unit.")
    return float(value)


def _checked_number(field: str, value: Any) -> float:
    number = _number(field, value)
    if field in _ABOVE_ZERO and number <= 0:
        raise CalibrationError(
            field, f"{number:g} is not above 0.", "Give a value above 0, or null where the field may be empty."
        )
    if field.endswith("_error") and number < 0:
        raise CalibrationError(
            field, f"An error of {number:g} cannot be.", "Give the 1 sigma error of the zero, 0 or more, or null."
        )
    if field.startswith("floor") and number < 0:
        raise CalibrationError(
            field, f"A noise of {number:g} cannot be.", "Give the 1 sigma noise of the dark detector, 0 or more."
        )
    return number


def _checked_leakage(value: Any) -> list[list[float]]:
    do = "Give [[a, b], [c, d]] with readings = leakage @ (port 1, port 2); [[1, 0], [0, 1]] is no leakage."
    matrix = _matrix("leakage", value, do)
    (a, b), (c, d) = matrix
    if abs(a * d - b * c) <= LEAST_DETERMINANT * max(abs(one) for row in matrix for one in row) ** 2:
        raise CalibrationError("leakage", "The matrix is singular: both ports would see the same mixture.", do)
    return matrix


def _checked_leakage_sigma(value: Any) -> list[list[float]]:
    do = "Give the 1 sigma uncertainty of each of the four shares, 0 or more, as [[a, b], [c, d]]."
    matrix = _matrix("leakage_sigma", value, do)
    if any(one < 0 for row in matrix for one in row):
        raise CalibrationError("leakage_sigma", "An uncertainty cannot be negative.", do)
    return matrix


def _matrix(field: str, value: Any, do: str) -> list[list[float]]:
    if not (
        isinstance(value, (list, tuple))
        and len(value) == 2
        and all(isinstance(row, (list, tuple)) and len(row) == 2 for row in value)
    ):
        raise CalibrationError(field, "It is not a 2 by 2 matrix.", do)
    return [[_number(field, one) for one in row] for row in value]


def _checked_state(value: Any) -> list[float]:
    do = "Give [s1, s2, s3], for example [1, 0, 0] for horizontal."
    if not (isinstance(value, (list, tuple)) and len(value) == 3):
        raise CalibrationError("wanted_state", "A state has three numbers.", do)
    state = [_number("wanted_state", one) for one in value]
    length = math.hypot(*state)
    if length < 1e-9:
        raise CalibrationError("wanted_state", "A state of length 0 has no direction.", do)
    return [one / length for one in state]


def _checked_port(value: Any) -> int:
    if isinstance(value, bool) or value not in (1, 2):
        raise CalibrationError("wanted_port", f"{value!r} is no port.", "Give 1 or 2: the port that should be bright.")
    return int(value)


def _checked_handedness(value: Any) -> str:
    if value not in ("optics", "ieee"):
        raise CalibrationError("handedness", f"{value!r} is no convention.", 'Give "optics" (seen against the light) or "ieee".')
    return value


def _checked_time(value: Any) -> datetime:
    if not isinstance(value, datetime) or value.tzinfo is None:
        raise CalibrationError(
            "zero_taken_at", f"{value!r} is no time with zone.", "Give when the beam was blocked for the zero."
        )
    return value
