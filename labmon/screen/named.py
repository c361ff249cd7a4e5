"""A station, tap or experiment by its address, if the reader may see it; else 404, so that names are not given away."""

from django.shortcuts import get_object_or_404

from ingest.models import Station, Tap
from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.people.rights import experiments_visible_to, stations_visible_to, taps_visible_to


def visible_station(person: Person, name: str) -> Station:
    """The station of this name."""
    return get_object_or_404(stations_visible_to(person).select_related("room", "bench"), name=name)


def visible_tap(person: Person, station: str, tap: str) -> Tap:
    """The tap ``station/tap``."""
    return get_object_or_404(taps_visible_to(person).select_related("station", "station__room"), station__name=station, name=tap)


def visible_experiment(person: Person, experiment_id: int) -> Experiment:
    """The experiment of this number."""
    return get_object_or_404(experiments_visible_to(person).select_related("owner"), pk=experiment_id)
