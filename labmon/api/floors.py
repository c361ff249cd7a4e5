"""Lab floors: the least that limits on a bench or tap must ask for."""

from typing import Any, Literal

from django.db.models import Q
from django.http import HttpRequest, HttpResponse

from labmon.api.answer import json_answer
from labmon.api.body import Body, Text, body_of
from labmon.api.named import station_named, tap_named, tap_path
from labmon.api.query import known_only
from labmon.api.times import rfc3339
from labmon.experiments.floors import limits_beyond, newest_floors, set_floor
from labmon.experiments.models import LimitFloor
from labmon.people.models import Person
from labmon.people.rights import Action, require, stations_visible_to


def get_floors(request: HttpRequest, person: Person) -> HttpResponse:
    """Floors of the benches that the caller may see."""
    known_only(request.GET)
    rows = newest_floors(Q(station__in=stations_visible_to(person)))
    return json_answer({"floors": [floor_facts(row) for row in rows if row.value is not None]})


def floor_facts(floor: LimitFloor) -> dict[str, Any]:
    """A floor as the document names it."""
    return {"station": floor.station.name, "tap": floor.tap.name if floor.tap else None, "quantity": floor.quantity,
            "value": floor.value, "set_at": rfc3339(floor.set_at), "reason": floor.reason}


class NewFloor(Body):
    """The body of POST …/floors; ``value`` null lifts the floor, ``tap`` left out means all taps of the bench."""

    quantity: Literal["er_db", "angle_deg", "dop", "power_w", "trusted_share", "time_to_limit_s"]
    value: float | None
    reason: Text
    tap: Text | None = None


def post_floor(request: HttpRequest, person: Person, station: str) -> HttpResponse:
    """Set, lower or lift a floor; managers only."""
    known_only(request.GET)
    found = station_named(person, station)
    require(person, Action.SET_FLOOR, found)
    wish = body_of(request, NewFloor)
    tap = None if wish.tap is None else tap_named(person, station, wish.tap)
    made = set_floor(found, wish.quantity, wish.value, by=person, reason=wish.reason, tap=tap)
    beyond = [{"experiment": one.limit.experiment_id, "tap": tap_path(one.limit.tap), "alarm": one.alarm}
              for one in limits_beyond(made)]
    return json_answer(floor_facts(made) | {"limits_beyond": beyond}, status=201)
