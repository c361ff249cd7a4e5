import pytest

from labmon.audit.actions import note
from labmon.audit.models import AuditPlace
from labmon.audit.places import places_of
from labmon.experiments.actions import set_limit
from labmon.experiments.models import Limit
from tests.factories import NOON, make_experiment, make_person, make_run, make_station, make_tap, store_alarm

pytestmark = pytest.mark.django_db


def test_what_an_entry_is_about():
    one, two = make_tap(make_station("n1"), "in"), make_tap(make_station("n2"), "in")
    experiment = make_experiment(one, two)
    set_limit(experiment, one, "er_db", alarm=20.0, by=None)
    own = f"experiment/{experiment.pk}"
    alarm = store_alarm(kind="untrusted", tap=two, experiment=experiment, raised_at=NOON, message="x")
    assert places_of(one.station) == places_of(one) == ["station/n1"]
    assert places_of(experiment) == places_of(make_run(experiment, NOON)) == [own, "station/n1", "station/n2"]
    assert places_of(Limit.objects.get()) == [own, "station/n1"] and places_of(alarm) == [own, "station/n2"]
    assert places_of("tap/n1/in") == ["station/n1"] and places_of("station/n1") == ["station/n1"]
    assert places_of(make_person()) == places_of("rules of calling") == []


def test_each_entry_keeps_its_places():
    tap = make_tap(make_station("n1"), "in")
    entry = note(None, "set calibration", tap)
    assert [(one.entry_id, one.place) for one in AuditPlace.objects.all()] == [(entry.pk, "station/n1")]
