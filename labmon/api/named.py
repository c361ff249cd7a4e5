"""What an address names, as far as the caller may see it."""

from typing import Any

from django.db.models import QuerySet

from ingest.models import Station, Tap
from labmon.api.problem import not_found, wrong_field
from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.people.rights import experiments_visible_to, stations_visible_to, taps_visible_to


def tap_path(tap: Tap) -> str:
    """``station/tap``."""
    return f"{tap.station.name}/{tap.name}"


def tap_named(person: Person, station: str, tap: str) -> Tap:
    """The tap of an address; 404 where it is not there or not for this person."""
    return one_named(taps_visible_to(person).select_related("station"), "There is no such tap for you.",
                "GET /api/v1/stations lists the taps that you may see.", station__name=station, name=tap)


def station_named(person: Person, station: str) -> Station:
    """The station of an address; 404 where it is not there or not for this person."""
    return one_named(stations_visible_to(person), "There is no such station for you.",
                "GET /api/v1/stations lists those that you may see.", name=station)


def tap_in_body(person: Person, path: str, *, field: str) -> Tap:
    """The tap that a body names as ``station/tap``."""
    station, _, name = path.partition("/")
    if "\0" not in path:
        for tap in taps_visible_to(person).select_related("station").filter(station__name=station, name=name):
            return tap
    raise wrong_field(field, f"There is no tap {path[:130]!r} for you.",
                      "Write station/tap; GET /api/v1/stations lists the taps that you may see.")


def experiment_named(person: Person, number: int) -> Experiment:
    """The experiment of an address."""
    return one_named(experiments_visible_to(person), "There is no such experiment for you.",
                "GET /api/v1/experiments lists those that you may see.", pk=number)


def one_named(rows: QuerySet[Any], title: str, detail: str, **wanted: Any) -> Any:
    """The row that is wanted; 404 with these words where it is not there or not for this person."""
    row = rows.filter(**wanted).first()
    if row is None:
        raise not_found(title, detail)
    return row
