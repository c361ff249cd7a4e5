"""A station, tap or experiment by its address, if the reader may see it; else 404, so that names are not given away."""

from django.shortcuts import get_object_or_404

from ingest.models import Station, Tap
from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.people.rights import experiments_visible_to, stations_visible_to, taps_visible_to
from labmon.runs.models import Run
from labmon.runs.queries import runs_visible_to


def visible_station(person: Person, name: str) -> Station:
    """The station of this name."""
    return get_object_or_404(stations_visible_to(person).select_related("room", "bench"), name=name)


def visible_tap(person: Person, station: str, tap: str) -> Tap:
    """The tap ``station/tap``."""
    return get_object_or_404(taps_visible_to(person).select_related("station", "station__room"), station__name=station, name=tap)


def visible_run(person: Person, run_id: int) -> Run:
    """The run of this number."""
    people = ("owner", "deputy", "planned_by", "ended_by", "cancelled_by")
    rows = runs_visible_to(person).select_related("experiment__owner", *people)
    return get_object_or_404(rows, pk=run_id)


def visible_experiment(person: Person, experiment_id: int) -> Experiment:
    """The experiment of this number."""
    return get_object_or_404(experiments_visible_to(person).select_related("owner"), pk=experiment_id)
