"""Shelving on the pages: by plain forms, with a banner for everyone."""

import re

import pytest

from labmon.alarms.models import AlarmHold
from labmon.people.models import Role
from tests.factories import NOON, make_experiment, make_person, make_station, make_tap, store_alarm

pytestmark = pytest.mark.django_db


@pytest.fixture
def owner():
    return make_person(Role.OWNER, username="asha")


@pytest.fixture
def alarm(owner):
    tap = make_tap(make_station("n2", owner=owner), "eom-in")
    experiment = make_experiment(tap, owner=owner, name="EOM input")
    return store_alarm(kind="untrusted", tap=tap, experiment=experiment, raised_at=NOON, message="frozen")


def words(answer):
    text = re.sub(r"<(script|style|svg|form|details).*?</\1>", " ", answer.content.decode(), flags=re.S)
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", text))


def test_shelve_by_the_form_and_everyone_sees_the_banner(client, alarm):
    client.force_login(make_person(Role.RESEARCHER, username="joren"))
    page = client.get("/alarms/").content.decode()
    assert f'action="/alarms/{alarm.pk}/shelve/"' in page
    answer = client.post(f"/alarms/{alarm.pk}/shelve/", {"for_s": "7200", "reason": "new cord", "next": "/alarms/"}, follow=True)
    alarm.refresh_from_db()
    assert alarm.state == "shelved"
    assert "n2/eom-in , untrusted readings: shelved by joren until" in words(answer)
    guest = make_person(Role.GUEST)
    guest.guest_stations.add(alarm.tap.station)
    client.force_login(guest)
    for address in ("/", "/alarms/", "/stations/n2/"):
        said = words(client.get(address))
        assert "Kept quiet, still judged" in said and "new cord" in said
    assert "Unshelve" not in client.get("/").content.decode()


def test_end_it_by_the_banners_button(client, alarm, owner):
    client.force_login(owner)
    client.post("/stations/n2/quiet/", {"what": f"{alarm.tap_id}::", "for_s": "out", "reason": "laser away"})
    alarm.refresh_from_db()
    hold = AlarmHold.objects.get()
    assert (alarm.state, hold.kind, hold.until) == ("out-of-service", "out-of-service", None)
    answer = client.post(f"/holds/{hold.pk}/end/", {"next": "/stations/n2/"}, follow=True)
    alarm.refresh_from_db()
    assert alarm.state == "unacknowledged" and "Kept quiet, still judged" not in words(answer)


@pytest.mark.parametrize(("for_s", "reason"), [("20000", "x"), ("1800", ""), ("soon", "x"), ("nan", "x")])
def test_a_refusal_is_said(client, alarm, for_s, reason):
    client.force_login(make_person(Role.RESEARCHER))
    answer = client.post(f"/alarms/{alarm.pk}/shelve/", {"for_s": for_s, "reason": reason, "next": "/"}, follow=True)
    assert "Not done." in words(answer) and not AlarmHold.objects.exists()


def test_who_may_not(client, alarm):
    guest = make_person(Role.GUEST)
    guest.guest_stations.add(alarm.tap.station)
    client.force_login(guest)
    assert client.post(f"/alarms/{alarm.pk}/shelve/", {"for_s": "1800", "reason": "x"}).status_code == 403
    client.force_login(make_person(Role.RESEARCHER))
    out = {"what": f"{alarm.tap_id}::", "for_s": "out", "reason": "x"}
    assert client.post("/stations/n2/quiet/", out).status_code == 403
    assert client.post("/stations/n2/quiet/", out | {"what": "0::"}).status_code == 404
    assert not AlarmHold.objects.exists()


def test_a_station_page_offers_out_of_service_to_its_owner_only(client, alarm, owner):
    for person, is_offered in ((owner, True), (make_person(Role.RESEARCHER), False)):
        client.force_login(person)
        assert ('value="out"' in client.get("/stations/n2/").content.decode()) is is_offered
