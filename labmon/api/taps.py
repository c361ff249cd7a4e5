"""A tap's newest sample, its history, its calibration."""

from datetime import datetime
from typing import Any, Literal

import msgspec
import numpy as np
from django.http import HttpRequest, HttpResponse
from django.utils import timezone
from msgspec import UNSET, UnsetType

from analysis.models import Calibration
from analysis.record.rollups import History, history
from ingest.models import Tap
from labmon.api.answer import json_answer
from labmon.api.body import Body, Text, body_of
from labmon.api.named import tap_named, tap_path
from labmon.api.problem import wrong_field
from labmon.api.query import known_only, one_of, span_of, whole_number
from labmon.api.schemas import MEASURED, SAMPLED
from labmon.api.span import Span
from labmon.api.times import parse_time, rfc3339, rfc3339_many
from labmon.benches.calibration import set_calibration
from labmon.benches.queries import now_of
from labmon.people.models import Person
from labmon.people.rights import Action, require

MOST_POINTS = 10_000
NO_SAMPLE = dict.fromkeys(
    ("er_db", "er_sigma_db", "angle_deg", "polarized_er_db", "dop", "azimuth_deg", "ellipticity_deg", "sop", "power_w",
     "temperature_c", "humidity_pct", "pressure_hpa"))


def get_now(request: HttpRequest, person: Person, station: str, tap: str) -> HttpResponse:
    """The newest reduced sample by data time; all null where the tap has none yet."""
    known_only(request.GET)
    return json_answer(now_facts(tap_named(person, station, tap)))


def now_facts(tap: Tap) -> dict[str, Any]:
    """The newest sample as the contract names it."""
    sample = now_of(tap)
    verdicts = sample.trust_by_quantity if sample else {}
    trusted = sample.last_trusted if sample else {}
    bounds = ("is_lower_bound", "is_upper_bound", "angle_is_upper_bound", "angle_is_lower_bound")
    return ({"tap": tap_path(tap), "kind": tap.kind, "taken_at": rfc3339(sample.taken_at) if sample else None,
             "age_s": sample.age_s if sample else None}
            | {name: getattr(sample, name, None) for name in NO_SAMPLE}
            | {name: bool(getattr(sample, name, False)) for name in bounds}
            | {"trust": sample.trust if sample else "none", "trust_reasons": list(sample.trust_reasons) if sample else []}
            | {f"{name}_trust": verdicts.get(name, {}).get("trust", "none") for name in SAMPLED}
            | {f"{name}_reasons": verdicts.get(name, {}).get("reasons", []) for name in SAMPLED}
            | {f"{name}_codes": verdicts.get(name, {}).get("codes", []) for name in SAMPLED}
            | {"last_trusted": {name: trusted.get(name) for name in SAMPLED}})


def get_history(request: HttpRequest, person: Person, station: str, tap: str) -> HttpResponse:
    """An envelope of one quantity; a bucket without readings is null."""
    known_only(request.GET, "span", "points", "quantity")
    span = span_of(request.GET)
    points = whole_number(request.GET, "points", default=1000, most=MOST_POINTS)
    quantity = one_of(request.GET, "quantity", MEASURED, default="er_db")
    row = tap_named(person, station, tap)
    found = at_most(points, row.pk, quantity, span)
    return json_answer({"tap": tap_path(row), "quantity": quantity, "span": str(span), "bucket_s": found.bucket_s,
                        "at": rfc3339_many(found.at_us).tolist(), "min": _or_null(found.min),
                        "mean": _or_null(found.mean), "max": _or_null(found.max),
                        "trusted_share": _or_null(found.trusted_share)})


def at_most(points: int, tap_id: int, quantity: str, span: Span) -> History:
    """The history in at most so many buckets: one fewer is asked for where the span begins within a bucket."""
    found = history(tap_id, quantity, span.from_us, span.until_us, points)
    if len(found.at_us) > points > 1:
        return history(tap_id, quantity, span.from_us, span.until_us, points - 1)
    return found


def _or_null(values: np.ndarray) -> list[float | None]:
    finite = np.isfinite(values)
    return [value if is_there else None for value, is_there in zip(values.tolist(), finite.tolist(), strict=True)]


class NewCalibration(Body):
    """The body of PATCH …/calibration; what is left out is taken from the version valid at ``valid_from``."""

    valid_from: str | UnsetType = UNSET
    zero1: float | UnsetType = UNSET
    zero2: float | UnsetType = UNSET
    zero1_error: float | None | UnsetType = UNSET
    zero2_error: float | None | UnsetType = UNSET
    zero_taken_at: str | None | UnsetType = UNSET
    gain_ratio: float | UnsetType = UNSET
    floor1: float | UnsetType = UNSET
    floor2: float | UnsetType = UNSET
    saturation1: float | None | UnsetType = UNSET
    saturation2: float | None | UnsetType = UNSET
    leakage: tuple[tuple[float, float], tuple[float, float]] | None | UnsetType = UNSET
    leakage_sigma: tuple[tuple[float, float], tuple[float, float]] | None | UnsetType = UNSET
    wanted_port: Literal[1, 2] | UnsetType = UNSET
    monitor_ratio: float | None | UnsetType = UNSET
    bright_nominal: float | None | UnsetType = UNSET
    wanted_state: tuple[float, float, float] | None | UnsetType = UNSET
    handedness: Literal["ieee", "optics"] | UnsetType = UNSET
    reason: Text = ""


def patch_calibration(request: HttpRequest, person: Person, station: str, tap: str) -> HttpResponse:
    """A new version of the calibration; it holds from ``valid_from`` (else now) until the next."""
    known_only(request.GET)
    row = tap_named(person, station, tap)
    require(person, Action.CALIBRATE, row)
    wish = body_of(request, NewCalibration)
    changes = {name: _plain(value) for name, value in msgspec.structs.asdict(wish).items()
               if value is not UNSET and name not in {"valid_from", "zero_taken_at", "reason"}}
    if wish.zero_taken_at is not UNSET:
        changes["zero_taken_at"] = None if wish.zero_taken_at is None else _time_in("zero_taken_at", wish.zero_taken_at)
    valid_from = timezone.now() if wish.valid_from is UNSET else _time_in("valid_from", wish.valid_from)
    version = set_calibration(row, valid_from, changes, by=person, reason=wish.reason)
    return json_answer(calibration_facts(row, version))


def calibration_facts(tap: Tap, version: Calibration) -> dict[str, Any]:
    """A version of a tap's calibration."""
    numbers = ("zero1", "zero2", "zero1_error", "zero2_error", "gain_ratio", "floor1", "floor2", "saturation1", "saturation2",
               "leakage", "leakage_sigma", "wanted_port", "monitor_ratio", "bright_nominal", "wanted_state", "handedness",
               "entered_by")
    return {"tap": tap_path(tap), "valid_from": rfc3339(version.valid_from), "entered_at": rfc3339(version.entered_at),
            "zero_taken_at": rfc3339(version.zero_taken_at)} | {name: getattr(version, name) for name in numbers}


def _time_in(field: str, text: str) -> datetime:
    try:
        return parse_time(text)
    except ValueError as error:
        raise wrong_field(field, f"{field} cannot be used.", f"{error}.") from None


def _plain(value: Any) -> Any:
    """Tuples as lists, as they are stored."""
    return [_plain(part) for part in value] if isinstance(value, tuple) else value
