"""The call review as a page."""

import re
from datetime import UTC, datetime, timedelta

import pytest

from labmon.people.models import Role
from labmon.screen.call_review_view import monday_named, monday_of, week_name
from tests.factories import make_person, make_station, make_tap
from tests.labmon.review.test_queries import MONDAY, raise_alarm, tell

pytestmark = pytest.mark.django_db


def words(answer):
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", answer.content.decode()).replace("\xa0", " "))


def test_week_names_are_iso_8601():
    """2020-W53 begins on 2020-12-28, 2021-W01 on 2021-01-04 (ISO 8601:2004, from memory; Python's calendar agrees)."""
    assert week_name(datetime(2020, 12, 28, tzinfo=UTC)) == "2020-W53"
    assert week_name(datetime(2021, 1, 4, tzinfo=UTC)) == "2021-W01"
    assert str(monday_named("2020-W53")) == "2020-12-28" and monday_named("2021-W53") is None
    assert [monday_named(one) for one in ("", "x", "2021", "2021-W99", "99999-W01", "2021-W-1")] == [None] * 6
    assert monday_of(datetime(2031, 3, 9, 23, 59, tzinfo=UTC)) == MONDAY == monday_of(MONDAY)


def test_an_empty_week_says_how_one_would_know(client):
    client.force_login(make_person(Role.RESEARCHER))
    said = words(client.get("/calls/review/"))
    assert "Nobody was called this week; 0 alarms were raised." in said and "drill" in said
    assert "The address names no week" in words(client.get("/calls/review/?week=yesterday"))
    assert client.get("/calls/review/?week=2999-W01").status_code == 200


def test_a_week_with_a_nuisance(client):
    ann, bob = make_person(Role.OWNER, username="ann"), make_person(Role.RESEARCHER, username="bob")
    tap = make_tap(make_station("n2"), "in")
    past = monday_of(datetime.now(UTC)) - timedelta(days=14)
    for minute in range(12):
        raised = past + timedelta(hours=1, seconds=20 * minute)
        raise_alarm(tap, raised, returned_at=raised + timedelta(seconds=10), acknowledged_at=datetime.now(UTC),
                    acknowledged_by=ann)
    raise_alarm(make_tap(tap.station, "air"), past, returned_at=None)
    tell(ann, past + timedelta(hours=1))
    tell(bob, past + timedelta(hours=12))
    week = week_name(past)
    client.force_login(make_person())
    said = words(client.get(f"/calls/review/?week={week}"))
    assert "2 calls this week to 2 people, 1 of them at night." in said and "ann 1 0 1" in said
    assert "n2/in, untrusted 12 92 % 10 s" in said and "Three times or more within a minute: n2/in, untrusted" in said
    assert "n2/air, untrusted: since" in said and "Outside office hours: 50 % of the calls." in said
    assert "Most alarms in 10 minutes 13" not in said and "Most alarms in 10 minutes 12 a flood begins above 10" in said
    client.force_login(bob)
    said = words(client.get(f"/calls/review/?week={week}"))
    assert "bob 1 0 0" in said and "ann" not in said and "person 1" in said


def test_guests_do_not_see_who_was_called(client):
    client.force_login(make_person(Role.GUEST))
    assert client.get("/calls/review/").status_code == 403
