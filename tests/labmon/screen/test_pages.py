"""Pages by their addresses: who sees what, what a page says, and what it costs."""

import json
import re

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from ingest.models import SetAside, StationKey, TapKind
from labmon.alarms.models import Alarm, AlarmKind, AlarmState
from labmon.audit.models import AuditEntry
from labmon.experiments.actions import set_limit
from labmon.experiments.models import Limit
from labmon.people.models import Person, PersonKey, Role
from labmon.screen.snapshot import snapshot
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_station, make_tap

pytestmark = pytest.mark.django_db
PAGES = ["/", "/lab.json", "/alarms/", "/experiments/", "/you/"]


@pytest.fixture
def lab():
    """A bench of an owner, with a limit, an alarm, a key and a reading set aside; and a bench of nobody."""
    owner = make_person(Role.OWNER, username="asha")
    station = make_station("n2", owner=owner, room="North Hall")
    tap = make_tap(station, "eom-in")
    make_tap(make_station("s1", room="South Hall"), "trap")
    experiment = make_experiment(tap, owner=owner, name="EOM input")
    set_limit(experiment, tap, "er_db", alarm=20.0, warning=23.0, reason="residual modulation", by=owner)
    alarm = Alarm.objects.create(
        kind=AlarmKind.LIMIT,
        experiment=experiment,
        limit=Limit.objects.get(),
        tap=tap,
        quantity="er_db",
        raised_at=NOON,
        value=19.1,
        limit_value=20.0,
        message="n2/eom-in: extinction ratio below 20.0 dB",
    )
    StationKey.objects.create(station=station, digest=b"1" * 32, hint="x7fQ")
    SetAside.objects.create(
        station=station,
        tap=tap,
        arrival_us=NOON_US,
        field="port2",
        why="null is not a power",
        do="leave the reading out",
        reading={"port2": None},
        digest=b"2" * 16,
    )
    return owner, station, tap, experiment, alarm


def signed_in(client, role_or_person):
    person = role_or_person if isinstance(role_or_person, Person) else make_person(role_or_person)
    client.force_login(person)
    return person


def words(response) -> str:
    """The text of a page, blanks folded."""
    text = re.sub(r"<(script|style|svg).*?</\1>", " ", response.content.decode(), flags=re.S)
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", text).replace("\xa0", " "))


@pytest.mark.parametrize("address", [*PAGES, "/stations/n2/", "/audit/", "/people/"])
def test_who_is_not_signed_in_is_sent_to_sign_in(client, lab, address):
    answer = client.get(address)
    assert answer.status_code == 302
    assert answer["Location"].startswith("/login/?next=")


@pytest.mark.parametrize("role", list(Role))
def test_everyone_reads_the_common_pages(client, lab, role):
    signed_in(client, role)
    assert [client.get(address).status_code for address in PAGES] == [200] * len(PAGES)


@pytest.mark.parametrize(
    ("role", "statuses"),
    [
        (Role.GUEST, [403, 403, 403, 404, 404]),
        (Role.RESEARCHER, [403, 403, 403, 403, 200]),
        (Role.OWNER, [403, 200, 403, 403, 200]),
        (Role.MANAGER, [200, 200, 200, 200, 200]),
    ],
)
def test_the_others_by_role(client, lab, role, statuses):
    signed_in(client, role)
    addresses = ["/people/", "/audit/", "/experiments/new/", "/stations/n2/taps/eom-in/calibration/", "/stations/n2/set-aside/"]
    assert [client.get(address).status_code for address in addresses] == statuses


def test_an_owner_calibrates_and_keys_their_own_bench_only(client, lab):
    owner, *_ = lab
    signed_in(client, owner)
    assert client.get("/stations/n2/taps/eom-in/calibration/").status_code == 200
    assert client.get("/stations/s1/taps/trap/calibration/").status_code == 403
    assert "Make a key" in words(client.get("/stations/n2/"))
    assert "Make a key" not in words(client.get("/stations/s1/"))


def test_a_guest_sees_the_named_benches_and_nothing_of_others(client, lab):
    _, station, *_ = lab
    guest = signed_in(client, Role.GUEST)
    guest.guest_stations.set([station])
    assert "n2" in words(client.get("/"))
    assert "s1" not in words(client.get("/"))
    assert client.get("/stations/s1/").status_code == 404
    assert client.get("/stations/n2/").status_code == 200
    assert "x7fQ" not in client.get("/stations/n2/").content.decode()


def test_a_guest_whose_date_is_over_is_told_so(client, lab):
    signed_in(client, make_person(Role.GUEST, guest_until=NOON.replace(year=2001)))
    answer = client.get("/")
    assert answer.status_code == 403
    assert "Your access is over" in words(answer)


def test_the_lab_page_opens_with_its_sentence_and_says_it_in_the_title(client, lab):
    signed_in(client, Role.RESEARCHER)
    page = client.get("/").content.decode()
    sentence = re.search(r'<h1 class="sentence" id="sentence">([^<]+)</h1>', page).group(1)
    assert sentence.endswith("1 alarm waits for someone.")
    assert f"<title>{sentence} labmon</title>" in page
    assert json.loads(client.get("/lab.json").content)["sentence"] == sentence
    assert page.count('role="status"') == 1


def test_an_empty_lab_says_how_a_station_joins(client):
    signed_in(client, Role.MANAGER)
    said = words(client.get("/"))
    assert "No station has joined yet." in said
    assert "manage.py add_station" in said


def test_an_alarm_is_acknowledged_with_a_note_once(client, lab):
    *_, alarm = lab
    person = signed_in(client, Role.RESEARCHER)
    answer = client.post(f"/alarms/{alarm.pk}/acknowledge/", {"note": "I am on my way", "next": "/stations/n2/"})
    assert answer["Location"] == "/stations/n2/"
    alarm.refresh_from_db()
    assert (alarm.state, alarm.acknowledged_by, alarm.note) == (AlarmState.ACKNOWLEDGED, person, "I am on my way")
    assert AuditEntry.objects.filter(person=person).count() == 1
    assert f"acknowledged by {person.username}" in words(client.get("/alarms/"))


def test_a_guest_may_not_acknowledge(client, lab):
    _, station, *_, alarm = lab
    signed_in(client, Role.GUEST).guest_stations.set([station])
    assert client.post(f"/alarms/{alarm.pk}/acknowledge/").status_code in {403, 404}
    assert "Acknowledge" not in words(client.get("/alarms/"))


def test_the_answer_goes_back_to_this_site_only(client, lab):
    *_, alarm = lab
    signed_in(client, Role.RESEARCHER)
    assert client.post(f"/alarms/{alarm.pk}/acknowledge/", {"next": "https://elsewhere.example/"})["Location"] == "/alarms/"


def test_a_returned_alarm_stays_listed_until_someone_acknowledges(client, lab):
    *_, alarm = lab
    signed_in(client, Role.RESEARCHER)
    Alarm.objects.filter(pk=alarm.pk).update(state=AlarmState.RETURNED_UNACKNOWLEDGED, returned_at=NOON)
    said = words(client.get("/alarms/"))
    assert "1 alarm waits for someone" in said
    assert "returned, unacknowledged" in said


def test_limits_stand_in_degrees_and_db(client, lab):
    _, _, _, experiment, _ = lab
    signed_in(client, Role.RESEARCHER)
    said = words(client.get(f"/experiments/{experiment.pk}/"))
    assert "20.0 dB (11.4°)" in said
    assert "23.0 dB (8.1°)" in said
    assert "residual modulation" in said
    assert "Set a limit" not in said


def test_an_owner_sets_a_limit_with_a_decimal_comma(client, lab):
    owner, _, _, experiment, _ = lab
    signed_in(client, owner)
    typed = {
        "tap": "n2/eom-in",
        "quantity": "er_db",
        "alarm": "21,5",
        "warning": "",
        "on_delay_s": "30",
        "off_delay_s": "60",
        "deadband": "1",
        "reason": "new fibre",
    }
    assert client.post(f"/experiments/{experiment.pk}/limits/", typed).status_code == 302
    assert Limit.objects.get().versions.order_by("-number").first().alarm == 21.5


def test_an_unusable_limit_is_refused_at_its_field_and_nothing_is_written(client, lab):
    owner, _, _, experiment, _ = lab
    signed_in(client, owner)
    typed = {"tap": "n2/eom-in", "quantity": "er_db", "alarm": "500", "on_delay_s": "30", "off_delay_s": "60", "reason": "x"}
    answer = client.post(f"/experiments/{experiment.pk}/limits/", typed)
    assert answer.status_code == 422
    assert 'class="fault"' in answer.content.decode()
    assert Limit.objects.get().versions.count() == 1


def test_a_researcher_sets_no_limit(client, lab):
    _, _, _, experiment, _ = lab
    signed_in(client, Role.RESEARCHER)
    assert client.post(f"/experiments/{experiment.pk}/limits/", {}).status_code == 403


def test_an_owner_makes_an_experiment_of_their_own_taps(client, lab):
    owner, *_ = lab
    signed_in(client, owner)
    page = client.get("/experiments/new/").content.decode()
    assert "n2/eom-in" in page
    assert "s1/trap" not in page
    assert (
        client.post("/experiments/new/", {"name": "Second", "taps": ["n2/eom-in"], "untrusted_after_s": "60"}).status_code == 302
    )


def test_a_station_key_is_shown_once_and_can_be_revoked(client, lab):
    owner, station, *_ = lab
    signed_in(client, owner)
    answer = client.post("/stations/n2/keys/")
    key = re.search(r'<code id="key">([^<]+)</code>', answer.content.decode()).group(1)
    assert "no-store" in answer["Cache-Control"]
    assert key not in client.get("/stations/n2/").content.decode()
    newest = station.keys.order_by("-pk").first()
    assert client.post(f"/stations/n2/keys/{newest.pk}/revoke/").status_code == 302
    newest.refresh_from_db()
    assert newest.revoked_at is not None


def test_a_key_of_another_station_is_not_revoked_from_here(client, lab):
    signed_in(client, Role.MANAGER)
    assert client.post(f"/stations/s1/keys/{StationKey.objects.get(hint='x7fQ').pk}/revoke/").status_code == 404
    assert StationKey.objects.get(hint="x7fQ").revoked_at is None


def test_a_calibration_is_entered_beside_the_laser_safety_caution(client, lab):
    owner, _, tap, *_ = lab
    signed_in(client, owner)
    page = words(client.get("/stations/n2/taps/eom-in/calibration/"))
    assert "never look into a fibre" in page
    assert "laser-safety officer" in page
    typed = {
        "valid_from": "2031-03-04 02:00",
        "zero2": "0,3e-6",
        "leakage": "1 0,001 0 1".replace(",", "."),
        "reason": "beam blocked",
    }
    assert client.post("/stations/n2/taps/eom-in/calibration/", typed).status_code == 302
    version = tap.calibrations.get()
    assert (version.zero2, version.leakage) == (0.3e-6, [[1, 0.001], [0, 1]])


def test_readings_set_aside_are_paged_by_number(client, lab):
    _, station, tap, *_ = lab
    SetAside.objects.bulk_create(
        SetAside(
            station=station,
            tap=tap,
            arrival_us=NOON_US,
            field="port1",
            why=f"fault {index}",
            do="look",
            reading={},
            digest=index.to_bytes(16, "big"),
        )
        for index in range(150)
    )
    signed_in(client, Role.RESEARCHER)
    first = client.get("/stations/n2/set-aside/")
    older = re.search(r"\?before=(\d+)", first.content.decode()).group(1)
    second = client.get(f"/stations/n2/set-aside/?before={older}")
    assert "fault 149" in words(first)
    assert "fault 0 " in words(second)
    assert "null is not a power" in words(second)


def test_people_are_added_given_roles_and_ended(client, lab):
    signed_in(client, Role.MANAGER)
    assert (
        client.post(
            "/people/", {"name": "nadia", "role": "guest", "password": "a long enough one", "guest_stations": ["n2"]}
        ).status_code
        == 302
    )
    nadia = Person.objects.get(username="nadia")
    assert [one.name for one in nadia.guest_stations.all()] == ["n2"]
    assert client.post(f"/people/{nadia.pk}/role/", {"role": "researcher"}).status_code == 302
    assert client.post(f"/people/{nadia.pk}/end/").status_code == 302
    nadia.refresh_from_db()
    assert (nadia.role, nadia.is_active) == ("researcher", False)


def test_ones_own_key_and_password(client, lab):
    person = signed_in(client, Role.RESEARCHER)
    person.set_password("the old password")
    person.save()
    client.force_login(person)
    key = re.search(r'<code id="key">([^<]+)</code>', client.post("/you/keys/").content.decode()).group(1)
    assert key.startswith("person-")
    assert client.post(f"/you/keys/{PersonKey.objects.get().pk}/revoke/").status_code == 302
    typed = {"old_password": "the old password", "new_password1": "a quite new one 7", "new_password2": "a quite new one 7"}
    assert client.post("/you/", typed).status_code == 302
    assert client.get("/you/").status_code == 200
    person.refresh_from_db()
    assert person.check_password("a quite new one 7")


def test_someone_elses_key_is_not_revoked(client, lab):
    other = PersonKey.objects.create(person=make_person(), digest=b"9" * 32, hint="abcd")
    signed_in(client, Role.RESEARCHER)
    assert client.post(f"/you/keys/{other.pk}/revoke/").status_code == 404


@pytest.mark.parametrize(
    "address",
    ["/nowhere/", "/stations/none/", "/experiments/999999999999999999999/", "/alarms/?before=99999999999999999999&state=all"],
)
def test_wrong_addresses_never_break(client, lab, address):
    signed_in(client, Role.MANAGER)
    answer = client.get(address)
    assert answer.status_code in {200, 404}
    if answer.status_code == 404:
        assert "There is nothing at this address" in words(answer)


def test_a_form_without_its_token_changes_nothing(lab):
    from django.test import Client

    *_, alarm = lab
    client = Client(enforce_csrf_checks=True)
    signed_in(client, Role.RESEARCHER)
    answer = client.post(f"/alarms/{alarm.pk}/acknowledge/")
    assert answer.status_code == 403
    assert "Nothing was changed" in words(answer)
    alarm.refresh_from_db()
    assert alarm.acknowledged_at is None


def test_no_page_has_inline_style_or_script(client, lab):
    owner, _, _, experiment, _ = lab
    signed_in(client, Role.MANAGER)
    for address in [
        *PAGES,
        "/stations/n2/",
        "/people/",
        "/audit/",
        f"/experiments/{experiment.pk}/",
        "/stations/n2/taps/eom-in/calibration/",
        "/stations/n2/set-aside/",
    ]:
        page = client.get(address).content.decode()
        assert not re.search(r"<style|\sstyle=|<script(?![^>]*\ssrc=)|\son\w+=", page), address


def queries_of(client, address: str) -> int:
    snapshot.forget()
    with CaptureQueriesContext(connection) as captured:
        assert client.get(address).status_code == 200
    return len(captured)


@pytest.mark.parametrize(
    "address", ["/", "/lab.json", "/lab.json?course=1", "/alarms/", "/alarms/?state=all", "/experiments/", "/stations/n2/"]
)
def test_queries_do_not_grow_with_stations(client, lab, address):
    signed_in(client, Role.MANAGER)

    def grow(count: int) -> None:
        for _ in range(count):
            tap = make_tap(make_station(room="North Hall"), kind=TapKind.TWO_PORT)
            experiment = make_experiment(tap)
            set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
            Alarm.objects.create(kind=AlarmKind.NO_READING, tap=tap, experiment=experiment, raised_at=NOON, message="no reading")

    grow(4)
    queries_of(client, address)
    with_few = queries_of(client, address)
    grow(45)
    assert queries_of(client, address) == with_few
