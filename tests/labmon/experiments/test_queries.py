import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from analysis.record.calibrations import new_version
from ingest.models import TapKind
from labmon.alarms.models import Alarm
from labmon.experiments.actions import retire_limit, set_limit
from labmon.experiments.queries import experiment_facts, experiment_rows, limits_of_tap
from labmon.people.models import Role
from tests.factories import NOON, make_experiment, make_person, make_tap

pytestmark = pytest.mark.django_db


def test_limit_is_said_in_db_and_degrees():
    """20 dB is 2 atan(10^-1) = 11.42 degrees on the sphere, 30 dB 3.62; an angle of 36 degrees is 9.76 dB (-20 log10 tan 18)."""
    tap = make_tap()
    experiment = make_experiment(tap)
    set_limit(experiment, tap, "er_db", alarm=20.0, warning=30.0, by=None)
    set_limit(experiment, tap, "angle_deg", alarm=36.0, by=None)
    angle, er = experiment_facts(experiment).limits
    assert (er.alarm_in_db, round(er.alarm_in_degrees, 2), round(er.warning_in_degrees, 2)) == (20.0, 11.42, 3.62)
    assert (round(angle.alarm_in_db, 2), angle.alarm_in_degrees, angle.warning_in_db) == (9.76, 36.0, None)


def test_history_is_newest_first_and_retired_limits_stay_on_their_experiments_page():
    tap = make_tap()
    experiment = make_experiment(tap)
    limit = set_limit(experiment, tap, "er_db", alarm=20.0, by=None).limit
    set_limit(experiment, tap, "er_db", alarm=18.0, by=None)
    retire_limit(limit, by=None)
    (facts,) = experiment_facts(experiment).limits
    assert [version.alarm for version in facts.versions] == [18.0, 18.0, 20.0] and facts.is_retired
    assert [one.limit_id for one in limits_of_tap(tap)] == [limit.pk]


def test_polarimeter_without_wanted_state_says_so():
    tap = make_tap(kind=TapKind.STOKES)
    experiment = make_experiment(tap)
    set_limit(experiment, tap, "angle_deg", alarm=20.0, by=None)
    set_limit(experiment, tap, "dop", alarm=0.9, by=None)
    angle, dop = experiment_facts(experiment).limits
    assert "no wanted state" in angle.note and dop.note == ""
    new_version(tap, NOON.replace(year=2020), {"wanted_state": [1, 0, 0]})
    assert experiment_facts(experiment).limits[0].note == ""


def test_rows_count_limits_and_alarms_each_once():
    taps = [make_tap(), make_tap()]
    experiment = make_experiment(*taps, owner=make_person(Role.OWNER, username="asha"))
    for tap in taps:
        limit = set_limit(experiment, tap, "er_db", alarm=20.0, by=None).limit
        Alarm.objects.create(kind="limit", experiment=experiment, limit=limit, tap=tap, raised_at=NOON, message="low")
    (row,) = experiment_rows(make_person())
    assert (row.owner, row.limits, row.open_alarms, row.unacknowledged, len(row.taps)) == ("asha", 2, 2, 2, 2)


def test_queries_do_not_grow():
    reader, counts = make_person(), []
    for number in (2, 10):
        for _ in range(number):
            tap = make_tap()
            set_limit(make_experiment(tap), tap, "er_db", alarm=20.0, by=None)
        with CaptureQueriesContext(connection) as queries:
            experiment_rows(reader)
        counts.append(len(queries))
    assert counts[0] == counts[1]
