"""Pages of runs: who plans, what is said before, while and after, and that a page's cost does not grow with the lab."""

from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from django.db import connection
from django.test import Client
from django.test.utils import CaptureQueriesContext
from django.utils import timezone

from labmon.experiments.actions import set_limit
from labmon.people.models import Role
from labmon.runs.ledgers import ask_ledger, stretches
from labmon.runs.limits import note_start_limits
from labmon.runs.making import make_waiting_ledgers
from labmon.runs.models import Run
from labmon.runs.so_far import account_for_runs, intervals_so_far
from tests.factories import (
    NOON,
    NOON_US,
    make_experiment,
    make_person,
    make_run,
    make_station,
    make_tap,
    store_alarm,
    store_readings,
)

pytestmark = pytest.mark.django_db
HOUR = timedelta(hours=1)


@pytest.fixture
def clock(monkeypatch):
    now = {"at": NOON - HOUR}
    monkeypatch.setattr("django.utils.timezone.now", lambda: now["at"])
    return lambda at: now.update(at=at)


@pytest.fixture
def bench(clock):
    tap = make_tap(make_station("n2", room="North Hall"), "in")
    experiment = make_experiment(tap, name="EOM input", owner=make_person(Role.OWNER, username="asha"))
    set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    return tap, experiment


def signed_in(role=Role.RESEARCHER, **fields):
    client, person = Client(), make_person(role, **fields)
    client.force_login(person)
    return client, person


def words(answer):
    return answer.content.decode()


def send(tap, er_db, step_us=1_000_000):
    wanted = np.full(len(er_db), 1e-3)
    at_us = NOON_US + np.arange(len(er_db)) * step_us
    dark = wanted * 10 ** (-np.asarray(er_db) / 10)
    store_readings(tap, at_us, sequence=np.arange(len(er_db)), boot="b", port1=wanted, port2=dark)


TONIGHT = {"name": "Rb scan", "starts_at": "2031-03-04T20:00", "length_h": "12", "taps": ["n2/in"], "owner": "tobias",
           "deputy": "", "allowed_below_s": "0", "wanted_trusted_pct": "95"}


def test_a_researcher_plans_changes_and_cancels_a_run_of_their_own(bench):
    client, person = signed_in(username="tobias")
    new = f"/experiments/{bench[1].pk}/runs/new/"
    assert client.get("/runs/", {"plan": bench[1].pk}).url == new
    assert 'value="2031-03-04T20:00"' in words(client.get(new))
    answer = client.post(new, TONIGHT)
    run = Run.objects.get()
    assert answer.url == f"/runs/{run.pk}/" and (run.owner, run.ends_at - run.starts_at) == (person, 12 * HOUR)
    page = words(client.get(answer.url))
    assert "Rb scan begins in" in page and "extinction ratio at least 20.0" in page and "tobias" in page
    assert client.post(f"/runs/{run.pk}/change/", TONIGHT | {"length_h": "13", "reason": "more"}).status_code == 302
    assert client.post(f"/runs/{run.pk}/end/", {"reason": "no dye"}).status_code == 302
    assert "Rb scan was cancelled" in words(client.get(answer.url))


@pytest.mark.parametrize(("field", "value", "said"), [
    ("starts_at", "soon", "is no time"), ("length_h", "0", "more than 0"), ("length_h", "0.001", "less than a minute"),
    ("name", " ", "required"), ("taps", [], "required"), ("wanted_trusted_pct", "120", "0 to 100"),
    ("starts_at", "2033-03-04T20:00", "400 days"), ("allowed_below_s", "-1", "0 to 86400"), ("owner", "asha", "Select a valid")])
def test_what_cannot_be_meant_is_said_and_nothing_typed_is_lost(bench, field, value, said):
    client, _ = signed_in(username="tobias")
    answer = client.post(f"/experiments/{bench[1].pk}/runs/new/", TONIGHT | {"deputy": "asha"} | {field: value})
    assert answer.status_code == 422 and said in words(answer)
    assert 'value="asha" selected' in words(answer) and not Run.objects.exists()


def test_a_time_that_is_taken_names_the_other_run(bench):
    client, _ = signed_in(username="tobias")
    make_run(bench[1], NOON + 9 * HOUR, name="night before")
    answer = client.post(f"/experiments/{bench[1].pk}/runs/new/", TONIGHT)
    assert answer.status_code == 422 and "“night before”" in words(answer)


def test_who_may_plan_and_change(bench):
    run = make_run(bench[1], NOON + HOUR, owner=make_person(Role.RESEARCHER))
    guest, person = signed_in(Role.GUEST)
    person.guest_stations.add(bench[0].station)
    assert guest.get(f"/runs/{run.pk}/").status_code == 200
    assert guest.get(f"/experiments/{bench[1].pk}/runs/new/").status_code == 403
    stranger, _ = signed_in()
    for address in ("change", "end", "ledger"):
        assert stranger.post(f"/runs/{run.pk}/{address}/").status_code == 403


def test_while_it_lasts_the_page_says_what_can_be_used_and_who_is_told(bench, clock):
    tap, experiment = bench
    run = make_run(experiment, NOON, 7200.0, owner=make_person(Role.RESEARCHER, username="tobias", email="t@lab.example"))
    send(tap, np.where(np.arange(610) < 60, 19.0, 30.0))
    clock(NOON + timedelta(seconds=610))
    note_start_limits(run, timezone.now())
    assert account_for_runs() == [run.pk]
    store_alarm(kind="limit", experiment=experiment, tap=tap, quantity="er_db", raised_at=NOON + timedelta(seconds=60),
                limit_value=20.0, value=19.0, message="n2/in: low")
    page = words(signed_in()[0].get(f"/runs/{run.pk}/"))
    assert "90.0\N{NO-BREAK SPACE}% usable so far" in page and "1\N{NO-BREAK SPACE}min</td>" in page
    assert "tobias (run owner)" in page and "<svg class=\"run-line\"" in page and "run-below" in page
    assert "Time to the limit" in page and "Waiting alarms" in page


def test_accounting_in_passes_equals_the_ledger(bench, clock):
    tap, experiment = bench
    run = make_run(experiment, NOON, 600.0)
    er_db = np.where((np.arange(620) // 50) % 3 == 1, 19.0, 30.0)
    send(tap, er_db)
    for second in (35, 70, 71, 300, 590, 599.9):
        clock(NOON + timedelta(seconds=second))
        note_start_limits(run, timezone.now())
        account_for_runs()
    so_far = run.so_far
    assert so_far.through_at == NOON + timedelta(seconds=580)
    clock(NOON + HOUR)
    ask_ledger(run, by=None)
    make_waiting_ledgers()
    ledger = run.ledgers.get()
    whole, passes = stretches(ledger), intervals_so_far(so_far)
    assert passes.klass.tolist() == whole.klass.tolist() and passes.first_s.tolist() == whole.first_s.tolist()
    assert passes.length_s.sum() == 580 and ledger.below_s == so_far.below_s


def test_after_it_the_page_is_the_ledger_with_its_versions(bench, clock):
    tap, experiment = bench
    run = make_run(experiment, NOON, 120.0, owner=make_person(Role.RESEARCHER, username="tobias"))
    client = Client()
    client.force_login(run.owner)
    send(tap, np.where(np.arange(100) < 20, 19.0, 30.0))
    clock(NOON + HOUR)
    assert "its ledger is being made" in words(client.get(f"/runs/{run.pk}/"))
    ask_ledger(run, by=None)
    make_waiting_ledgers()
    page = words(client.get(f"/runs/{run.pk}/"))
    assert "did not hold" in page and "Extinction ratio below its limit (n2/in)" in page and "Ledger, version 1" in page
    wish = {"reason": "shutter", "from_at": "2031-03-04 12:00:30", "until_at": "2031-03-04 12:00:40", "why": "shutter shut"}
    assert client.post(f"/runs/{run.pk}/ledger/", wish).status_code == 302
    make_waiting_ledgers()
    page = words(client.get(f"/runs/{run.pk}/"))
    assert "Declared unusable from" in page and "10\N{NO-BREAK SPACE}s were good and are untrusted" in page
    assert "Ledger, version 1" in words(client.get(f"/runs/{run.pk}/?version=1"))
    table = words(client.get(f"/runs/{run.pk}/ledger/1.csv")).splitlines()
    assert table[0] == "from_utc,until_utc,length_s,class,doubtful,reasons,taps"
    assert table[1] == "2031-03-04T12:00:00Z,2031-03-04T12:00:20Z,20,below limit,0,Extinction ratio below its limit,n2/in"
    refused = client.post(f"/runs/{run.pk}/ledger/", wish | {"until_at": "2031-03-05 12:00:40"})
    assert refused.status_code == 422 and "is no part of the run" in words(refused) and "shutter shut" in words(refused)


def test_without_a_limit_no_second_is_called_good(clock):
    tap = make_tap()
    run = make_run(make_experiment(tap), NOON, 60.0)
    send(tap, np.full(60, 30.0))
    clock(NOON + HOUR)
    ask_ledger(run, by=None)
    make_waiting_ledgers()
    page = words(signed_in()[0].get(f"/runs/{run.pk}/"))
    assert "No limit was in force: no second counts as good" in page and "No limit in force" in page


def test_the_week_begins_at_the_labs_midnight_also_when_clocks_change(bench, clock, settings):
    settings.LAB_ZONE = zone = ZoneInfo("Europe/Berlin")
    clock(datetime(2031, 10, 25, 12, tzinfo=UTC))
    client, _ = signed_in(username="tobias")
    wish = TONIGHT | {"starts_at": "2031-10-25T20:00", "length_h": "13"}
    assert client.post(f"/experiments/{bench[1].pk}/runs/new/", wish).status_code == 302
    run = Run.objects.get()
    assert run.over_at.astimezone(zone).hour == 8
    page = words(client.get("/runs/", {"week": "2031-10-25"}))
    assert "from 20:00" in page and "until 08:00" in page and "Europe/Berlin" in page
    lost = client.post(f"/experiments/{bench[1].pk}/runs/new/", wish | {"starts_at": "2032-03-28T02:30"})
    assert lost.status_code == 422 and "the clocks go forward" in words(lost)


@pytest.mark.parametrize("address", ["/runs/", "/runs/?week=2031-03-04"])
def test_the_list_costs_the_same_for_twenty_and_two_hundred_runs(bench, address):
    client, _ = signed_in()
    client.get(address)
    counts = []
    for many in (20, 200):
        while Run.objects.count() < many:
            make_run(make_experiment(make_tap()), NOON + HOUR)
        with CaptureQueriesContext(connection) as asked:
            assert client.get(address).status_code == 200
        counts.append(len(asked))
    assert counts[0] == counts[1] <= 20


def test_a_runs_page_costs_the_same_however_long_its_ledger(bench, clock):
    tap, experiment = bench
    counts = []
    for place, length in enumerate((20, 2000)):
        run = make_run(experiment, NOON + place * 2 * HOUR, float(length))
        at_us = NOON_US + place * 7_200_000_000 + np.arange(length) * 1_000_000
        store_readings(tap, at_us, sequence=np.arange(length), boot=f"b{place}",
                       port1=np.full(length, 1e-3), port2=np.where(np.arange(length) % 2, 2e-5, 1e-6))
        clock(NOON + 5 * HOUR)
        ask_ledger(run, by=None)
        make_waiting_ledgers()
        client, _ = signed_in()
        with CaptureQueriesContext(connection) as asked:
            page = words(client.get(f"/runs/{run.pk}/"))
        counts.append(len(asked))
    assert counts[0] == counts[1] and "And 800 more" in page and len(page) < 200_000
