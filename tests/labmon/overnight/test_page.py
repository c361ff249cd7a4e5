"""The overnight page: its sentence, its worst moments, its bounded cost."""

import re
from datetime import timedelta

import numpy as np
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext

from ingest.store.append import write_blocks
from labmon.experiments.models import Limit, LimitVersion
from labmon.people.models import Role
from labmon.pipeline.process import process_touched
from labmon.pipeline.rolling import roll_up_coarse_due, roll_up_due
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_station, make_tap

EVENING_US = NOON_US + 6 * 3_600_000_000    # 18:00 UTC of 4 March 2031; the lab's zone is UTC in tests
HOURS = 14


def bench(name, er_db, alarm=20.0):
    """A tap with readings every 10 s over the night, ER by hour of the night; NaN hours are missing."""
    tap = make_tap(make_station(name), "in", interval_s=10.0)
    experiment = make_experiment(tap, name=f"experiment of {name}")
    limit = Limit.objects.create(experiment=experiment, tap=tap, quantity="er_db")
    LimitVersion.objects.create(limit=limit, number=1, valid_from=NOON - timedelta(days=30), alarm=alarm)
    if er_db is not None:
        at_s = np.arange(0, HOURS * 3600, 10)
        value = np.asarray(er_db, float)[at_s // 3600]
        keep = np.isfinite(value)
        write_blocks(tap, EVENING_US + 1_000_000 * at_s[keep], {"port1": np.full(keep.sum(), 1e-3),
                                                                "port2": 1e-3 / 10 ** (value[keep] / 10)},
                     boot="b", sequence=np.flatnonzero(keep), arrival_us=EVENING_US + 1_000_000 * at_s[keep])
    return tap


def roll_up():
    process_touched()
    for work in (roll_up_due, roll_up_coarse_due):
        while work():
            pass


def page(person=None):
    client = Client()
    client.force_login(person or make_person(Role.RESEARCHER))
    answer = client.get("/overnight/?date=2031-03-04")
    assert answer.status_code == 200
    return answer.content.decode()


def test_the_first_sentence_counts_and_names(db):
    low = np.full(HOURS, 25.0)
    low[5] = 18.0
    bench("bench-a", np.full(HOURS, 27.0))
    bench("bench-b", low)
    bench("bench-c", None)
    roll_up()
    said = page()
    assert "1 of 3 benches fell below its limit in the night to 5 March 2031: bench-b/in; 1 had no judged reading." in said
    assert re.search(r"worst margin −2\.0\sdB about 23:[0-5]0", said)
    assert said.index("bench-b/in</a>") < said.index("bench-a/in</a>") < said.index("bench-c/in</a>"), "worst first"
    assert said.count('class="night-below"') == 1


def test_drift_is_told_in_degrees(db):
    """tan²(γ/2) of 27 dB and of 20 dB: 5.12° and 11.42° (docs/formulas.md; the handbook relation of leak and angle)."""
    er_db = np.full(HOURS, 27.0)
    er_db[-1] = 20.0
    bench("bench-a", er_db, alarm=18.0)
    roll_up()
    assert "angle 5.1° in the first hour, 11.4° in the last, 6.3° between its extremes" in page()


def test_missing_hours_are_hatched_and_told(db):
    gap = np.full(HOURS, 25.0)
    gap[3:5] = np.nan
    bench("bench-a", gap)
    roll_up()
    said = page()
    assert said.count('class="night-gap"') == 1 and "14 % missing" in said and "None of 1 bench fell below its limit" in said


def test_a_guest_sees_named_benches_only(db):
    tap = bench("bench-a", None)
    bench("bench-b", None)
    guest = make_person(Role.GUEST)
    guest.guest_stations.add(tap.station)
    assert "bench-b" not in page(guest) and "bench-a" in page(guest)


def test_the_last_night_any_night_and_no_night(db):
    client = Client()
    client.force_login(make_person(Role.RESEARCHER))
    assert client.get("/overnight/").status_code == 200
    assert client.get("/overnight/?date=yesterday").status_code == 404
    assert "No bench had a limit" in page()


def query_count():
    client = Client()
    client.force_login(make_person(Role.RESEARCHER))
    with CaptureQueriesContext(connection, ) as caught:
        client.get("/overnight/?date=2031-03-04")
    return len(caught)


def test_two_hundred_benches_cost_as_many_queries_as_twenty(db):
    few = [bench(f"bench-{number}", None) for number in range(20)]
    at_20 = query_count()
    for number in range(20, 200):
        bench(f"bench-{number}", None)
    assert len(few) == 20 and query_count() == at_20 <= 14


