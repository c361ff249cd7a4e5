"""Rules of keeping on a page: what holds, what a new one would delete, and the audit row of each change."""

import time

import numpy as np
import pytest

from ingest.models import DayFile, KeepRule
from ingest.store.days.seal import seal_days
from labmon.audit.models import AuditEntry
from labmon.people.models import Role
from tests.factories import make_person, make_station, make_tap, store_readings
from tests.labmon.screen.test_pages import queries_of, words

pytestmark = pytest.mark.django_db
S = 1_000_000
DAY = 86_400 * S
ADDRESS = "/keeping/"
TYPED = {"whose": "lab", "how": "days", "raw_days": "30", "reason": "the disk is small"}


@pytest.fixture
def tap(client):
    """A tap with a reading every ten minutes of two old days and of yesterday, sealed."""
    made = make_tap(make_station("b08"), "eom-in")
    today_us = time.time_ns() // 1000 // DAY * DAY
    for ago in (60, 50, 2):
        store_readings(made, today_us - ago * DAY + np.arange(0, 86_400, 600, dtype=np.int64) * S, port1=1e-3, port2=1e-6)
    seal_days(time.time_ns() // 1000)
    assert DayFile.objects.count() == 3
    client.force_login(make_person(Role.MANAGER, username="maren"))
    return made


def test_what_holds_and_what_is_held_is_said(client, tap):
    said = words(client.get(ADDRESS)).replace("\xa0", " ")
    assert "Raw readings are kept for ever." in said
    assert "b08/eom-in" in said and "as the lab: for ever" in said and " 432 " in said


def test_a_rule_that_deletes_says_what_and_asks_once_more(client, tap):
    asked = client.post(ADDRESS, TYPED)
    said = words(asked).replace("\xa0", " ")
    assert asked.status_code == 422 and not KeepRule.objects.exists()
    assert "Under this rule 2 days of taps from" in said and "can only come back from a backup" in said
    assert 'value="30"' in asked.content.decode()
    done = client.post(ADDRESS, TYPED | {"is_known": "on"}, follow=True)
    assert "Raw readings are kept at least 30 days." in words(done).replace("\xa0", " ")
    row = AuditEntry.objects.get(action="set keeping of raw readings")
    assert (row.person_name, row.reason, row.after) == ("maren", "the disk is small", {"raw kept": "at least 30 days"})


def test_a_taps_own_rule_is_set_and_ended(client, tap):
    KeepRule.objects.create(tap=None, raw_days=365, set_by="maren")
    client.post(ADDRESS, TYPED | {"whose": "b08/eom-in", "how": "for-ever", "raw_days": ""})
    said = words(client.get(ADDRESS)).replace("\xa0", " ")
    assert "kept at least 365 days; 1 tap has a rule of its own." in said and "for ever, set by maren" in said
    client.post(ADDRESS, TYPED | {"whose": "b08/eom-in", "how": "as-the-lab"})
    assert "as the lab: at least 365 days" in words(client.get(ADDRESS)).replace("\xa0", " ")
    assert AuditEntry.objects.filter(action="set keeping of raw readings").count() == 2


def test_going_back_to_a_lab_rule_that_deletes_asks_too(client, tap):
    KeepRule.objects.create(tap=None, raw_days=55, set_by="maren")
    KeepRule.objects.create(tap=tap, raw_days=None, set_by="maren")
    asked = client.post(ADDRESS, TYPED | {"whose": "b08/eom-in", "how": "as-the-lab"})
    assert "Under this rule 1 day of a tap" in words(asked).replace("\xa0", " ") and KeepRule.objects.count() == 2


@pytest.mark.parametrize(("typed", "word"), [
    ({"raw_days": ""}, "Say how many days"), ({"raw_days": "0"}, "greater than or equal to 1"), ({"reason": ""}, "required"),
    ({"how": "as-the-lab"}, "The lab"), ({"whose": "b09/none"}, "Select a valid choice"), ({"raw_days": "99999999"}, "36500"),
])
def test_what_cannot_be_meant_is_told_at_its_field(client, tap, typed, word):
    answer = client.post(ADDRESS, TYPED | typed)
    assert answer.status_code == 422 and word in words(answer)
    assert not KeepRule.objects.exists()


@pytest.mark.parametrize("role", [Role.GUEST, Role.RESEARCHER, Role.OWNER])
def test_only_managers_set_rules(client, tap, role):
    client.force_login(make_person(role))
    assert client.get(ADDRESS).status_code == 403 and client.post(ADDRESS, TYPED).status_code == 403


def test_queries_do_not_grow_with_the_taps(client, tap):
    queries_of(client, ADDRESS)
    few = queries_of(client, ADDRESS)
    for number in range(20):
        store_readings(make_tap(make_station(f"x{number}")), np.arange(10) * S, port1=1e-3, port2=1e-6)
    assert queries_of(client, ADDRESS) == few
