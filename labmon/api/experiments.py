"""Experiments and their limits, read and written."""

import math
from collections.abc import Iterable
from datetime import datetime
from itertools import pairwise
from typing import Any, Literal

from django.http import HttpRequest, HttpResponse
from django.utils import timezone

from analysis.judge.rule import Quantity
from analysis.quantities import angle_rad_from_er_db, er_db_from_angle_rad
from ingest.models import Tap
from labmon.api.answer import json_answer
from labmon.api.body import Body, Text, body_of
from labmon.api.named import experiment_named, tap_in_body, tap_path
from labmon.api.query import known_only
from labmon.api.times import rfc3339
from labmon.experiments.actions import create_experiment, set_limit
from labmon.experiments.models import Experiment, LimitVersion
from labmon.people.models import Person
from labmon.people.rights import Action, experiments_visible_to, require


def get_experiments(request: HttpRequest, person: Person) -> HttpResponse:
    """Experiments that the caller may see, by name."""
    known_only(request.GET)
    rows = experiments_visible_to(person).select_related("owner").prefetch_related("taps__station").order_by("name")
    return json_answer({"experiments": [experiment_facts(row) for row in rows]})


def experiment_facts(row: Experiment) -> dict[str, Any]:
    """An experiment as the contract names it."""
    return {"id": row.pk, "name": row.name, "owner": row.owner.username if row.owner else None,
            "taps": sorted(tap_path(tap) for tap in row.taps.all()), "no_reading_after_s": row.no_reading_after_s,
            "untrusted_after_s": row.untrusted_after_s, "created_at": rfc3339(row.created_at)}


class NewExperiment(Body):
    """The body of POST /experiments."""

    name: Text
    taps: list[Text]
    no_reading_after_s: float | None = None
    untrusted_after_s: float = 60.0


def post_experiment(request: HttpRequest, person: Person) -> HttpResponse:
    """A new experiment of the caller's; an owner may watch taps of own benches."""
    known_only(request.GET)
    wish = body_of(request, NewExperiment)
    taps = [tap_in_body(person, path, field=f"taps[{number}]") for number, path in enumerate(wish.taps)]
    _may_make(person, taps)
    made = create_experiment(wish.name, taps, by=person, owner=person, no_reading_after_s=wish.no_reading_after_s,
                             untrusted_after_s=wish.untrusted_after_s)
    return json_answer(experiment_facts(made), status=201)


def _may_make(person: Person, taps: list[Tap]) -> None:
    for tap in taps or [None]:
        require(person, Action.MAKE_EXPERIMENT, tap)


def get_limits(request: HttpRequest, person: Person, experiment_id: int) -> HttpResponse:
    """Limits in force, and every version that there was."""
    known_only(request.GET)
    experiment = experiment_named(person, experiment_id)
    versions = version_facts(LimitVersion.objects.filter(limit__experiment=experiment)
                             .select_related("limit__tap__station", "set_by", "consented_by").order_by("limit", "number"))
    now = rfc3339(timezone.now())
    in_force = [one for one in versions if not one["is_retired"] and one["valid_from"] <= now
                and (one["valid_until"] is None or one["valid_until"] > now)]
    return json_answer({"experiment": experiment.pk, "limits": in_force, "history": versions})


def version_facts(versions: Iterable[LimitVersion]) -> list[dict[str, Any]]:
    """Versions of limits as the contract names them; each holds until the next of the same limit.

    Args:
        versions: Ordered by limit and number, with ``limit.tap.station`` and ``set_by`` loaded.
    """
    return [_version_facts(row, after.valid_from if after and after.limit_id == row.limit_id else None)
            for row, after in pairwise([*versions, None])]


def _version_facts(row: LimitVersion, valid_until: datetime | None) -> dict[str, Any]:
    limit = row.limit
    plain = ("alarm", "warning", "on_delay_s", "off_delay_s", "deadband", "window_s", "in_runs_only", "is_retired", "reason")
    return ({"id": limit.pk, "experiment": limit.experiment_id, "tap": tap_path(limit.tap), "quantity": limit.quantity,
             "version": row.number, "valid_from": rfc3339(row.valid_from), "valid_until": rfc3339(valid_until),
             "set_by": row.set_by.username if row.set_by else None,
             "consented_by": row.consented_by.username if row.consented_by else None}
            | {name: getattr(row, name) for name in plain} | _on_both_scales(limit.quantity, row.alarm))


def _on_both_scales(quantity: str, alarm: float) -> dict[str, float | None]:
    """The alarm level in dB and in degrees on the sphere; None where it has no such scale."""
    er_db, angle_deg = None, None
    if quantity == Quantity.ER_DB:
        er_db, angle_deg = alarm, math.degrees(float(angle_rad_from_er_db(alarm)))
    elif quantity == Quantity.ANGLE_DEG:
        er_db, angle_deg = float(er_db_from_angle_rad(math.radians(alarm))), alarm
    return {"alarm_db": er_db, "alarm_deg": angle_deg}


class LimitBody(Body):
    """A limit as a body gives it, set or only tried."""

    tap: Text
    quantity: Literal["er_db", "angle_deg", "dop", "power_w", "trusted_share", "time_to_limit_s"]
    alarm: float
    warning: float | None = None
    on_delay_s: float = 60.0
    off_delay_s: float = 60.0
    deadband: float | None = None
    window_s: float | None = None


class NewLimit(LimitBody):
    """The body of POST …/limits."""

    in_runs_only: bool = False
    reason: Text = ""


def post_limit(request: HttpRequest, person: Person, experiment_id: int) -> HttpResponse:
    """A new limit, or the next version of the one on this tap and quantity."""
    known_only(request.GET)
    experiment = experiment_named(person, experiment_id)
    require(person, Action.SET_LIMIT, experiment)
    wish = body_of(request, NewLimit)
    tap = tap_in_body(person, wish.tap, field="tap")
    version = set_limit(experiment, tap, wish.quantity, alarm=wish.alarm, warning=wish.warning, on_delay_s=wish.on_delay_s,
                        off_delay_s=wish.off_delay_s, deadband=wish.deadband, window_s=wish.window_s,
                        in_runs_only=wish.in_runs_only,
                        reason=wish.reason, by=person)
    kept = LimitVersion.objects.select_related("limit__tap__station", "set_by", "consented_by").filter(pk=version.pk)
    return json_answer(version_facts(kept)[0], status=201)
