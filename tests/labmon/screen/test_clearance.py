"""Clearance and back-test pages by their addresses: what they say, to whom, and what they cost."""

import re

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from ingest.times import at_of, now_us
from labmon.clearance.back_tests import store_back_test, walk_due
from labmon.clearance.limits import limits_at
from labmon.clearance.models import BackTestPass
from labmon.experiments.actions import set_limit
from labmon.people.models import Role
from tests.factories import make_experiment, make_person, make_station, make_tap
from tests.labmon.clearance.bench import DAY_US, HOUR_US, MONDAY_US, bench_with, nights_of

pytestmark = pytest.mark.django_db


def text_of(answer) -> str:
    """The page's words."""
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", answer.content.decode())).replace("\N{NO-BREAK SPACE}", " ")


def start_text(us: int) -> str:
    return at_of(us).strftime("%Y-%m-%d %H:%M")


@pytest.fixture
def person(client):
    who = make_person(Role.RESEARCHER)
    client.force_login(who)
    return who


def test_the_answer_stands_in_the_title_and_the_picture_shows_each_night(client, person):
    experiment, _, _ = bench_with(nights_of(19, {3: 9.0}))
    asked = {"length_h": "12", "start": start_text(MONDAY_US + 18 * DAY_US)}
    answer = client.get(f"/experiments/{experiment.pk}/clearance/", asked)
    said, html = text_of(answer), answer.content.decode()
    assert "<title>Not cleared: 13 of 14 such nights held; failure up to 30\N{NO-BREAK SPACE}%." in html
    assert "8 more comparable nights without a failure would clear it." in said and "nobody knows" in said
    assert "what would have been said at that time" in said
    held, failed = (re.search(rf'class="replay-{word}" d="([^"]*)"', html).group(1) for word in ("held", "failed"))
    assert held.count("M") == 13 and failed.count("M") == 1 and "Thu 7 Mar" in said and 'href="#mark-below"' in html
    assert "Block the beam and take one." in said and "laser-safety officer" in said


def test_words_are_never_a_lamp(client, person):
    """Cleared: no mark, no colour class; N and the bound stand there."""
    experiment, _, _ = bench_with(nights_of(19))
    html = client.get(f"/experiments/{experiment.pk}/clearance/",
                      {"length_h": "12", "start": start_text(MONDAY_US + 18 * DAY_US)}).content.decode()
    assert "Cleared: 14 of 14 such nights held; failure up to 19" in html and "mark-below\" x" not in html
    assert "green" not in html


def test_the_experiments_page_asks_by_itself(client, person):
    tap = make_tap(make_station("n2"), "eom-in")
    experiment = make_experiment(tap, name="EOM input")
    assert "Could I start now? Not enough evidence: no limit on the extinction ratio" in text_of(
        client.get(f"/experiments/{experiment.pk}/"))
    set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    said = text_of(client.get(f"/experiments/{experiment.pk}/"))
    assert "Not enough evidence: the reading now is not trusted (n2/eom-in: no reading now); no such" in said
    part = client.get(f"/experiments/{experiment.pk}/", headers={"X-Labmon-Part": "1"})
    assert "Not enough evidence" not in text_of(part)       # a refresh of the live parts asks nothing anew


@pytest.mark.parametrize(("typed", "word"), [
    ({"length_h": "", "start": ""}, "This field is required"), ({"length_h": "x"}, "Enter a number"),
    ({"length_h": "12", "start": "tonight"}, "is no time. Write it like"),
    ({"length_h": "2000"}, "Choose from a minute to 31 days"),
    ({"length_h": "1", "allowed_s": "7200"}, "Choose from 0 to the run")])
def test_what_cannot_be_asked_is_said_at_its_field_and_kept(client, person, typed, word):
    experiment = make_experiment(make_tap())
    answer = client.get(f"/experiments/{experiment.pk}/clearance/", typed)
    assert answer.status_code == 422 and word in text_of(answer).replace("&#x27;", "'")
    assert all(f'value="{value}"' in answer.content.decode() for value in typed.values() if value)


def test_a_decimal_comma_is_understood(client, person):
    experiment = make_experiment(make_tap())
    assert client.get(f"/experiments/{experiment.pk}/clearance/", {"length_h": "1,5"}).status_code == 200


def test_the_back_test_page_before_and_after(client, person):
    assert "No back-test has been made yet." in text_of(client.get("/clearance/backtest/"))
    experiment, _, later_us = bench_with(nights_of(26, {24: 9.0}))
    asked = client.post("/clearance/backtest/ask/", follow=True)
    assert "A back-test is under way: 0 of 1 limit done." in text_of(asked)
    walk_due(at_of(later_us + HOUR_US))
    answer = client.get("/clearance/backtest/")
    said = text_of(answer)
    assert "cleared nights of this lab" in said and "held and 1 failed." in said and "nobody knows" in said
    assert "Clearance (replay)" in said and "Rule of thumb: now 3 dB above the limit" in said
    own = text_of(client.get(f"/experiments/{experiment.pk}/clearance/backtest/"))
    assert "held and 1 failed." in own and "north-1/eom-in" in own


def test_a_guest_sees_the_sum_of_their_own_benches_and_may_not_ask(client):
    seen, _, later_us = bench_with(nights_of(26))
    hidden, _, _ = bench_with(nights_of(26, {24: 9.0}), name="north-2")
    BackTestPass.objects.create(total=2)
    for experiment in (seen, hidden):
        store_back_test(limits_at(experiment, at_of(later_us))[0], at_of(later_us + HOUR_US))
    walk_due(at_of(later_us + HOUR_US))
    guest = make_person(Role.GUEST)
    guest.guest_stations.add(seen.taps.get().station)
    client.force_login(guest)
    said = text_of(client.get("/clearance/backtest/"))
    assert "of your benches every one held." in said and "north-2" not in said and hidden.name not in said
    assert "Make it anew now" not in said and client.post("/clearance/backtest/ask/").status_code == 403
    assert client.get(f"/experiments/{hidden.pk}/clearance/backtest/").status_code == 404
    assert client.get(f"/experiments/{hidden.pk}/clearance/").status_code == 404


def test_the_lab_page_costs_the_same_for_many_benches(client, person):
    def cost(count: int) -> int:
        for number in range(count):
            tap = make_tap(make_station(f"b{count}-{number}"))
            experiment = make_experiment(tap)
            set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
            store_back_test(limits_at(experiment, at_of(now_us()))[0], at_of(now_us()))
        with CaptureQueriesContext(connection) as queries:
            assert client.get("/clearance/backtest/").status_code == 200
        return len(queries)

    assert cost(20) == cost(180)
