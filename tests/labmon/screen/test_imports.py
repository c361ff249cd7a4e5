"""The import page by its outer door: send a file, name its columns, look, read it in."""

import gzip
import re

import pytest
from django.core.files.storage import default_storage
from django.core.files.uploadedfile import SimpleUploadedFile

from ingest.models import FileImport, TapKind, Unit
from ingest.store.read import read_readings
from labmon.audit.models import AuditEntry
from labmon.celery import app
from labmon.people.models import Role
from labmon.pipeline.imports import import_upload, take_up_left_imports_task
from tests.factories import make_person, make_station, make_tap

pytestmark = pytest.mark.django_db

FILE = ("Bench 3\n\nDay;Hour;P1 (uW);P2 (uW);Temp (°C)\n"
        "04.03.2031;12:00:00;1000,0;1,0;21,3\n04.03.2031;12:00:01;1000,0;10,0;21,3\n04.03.2031;12:00:02;x;1,0;21,4\n"
        "04.03.2031;12:00:03;1000,0;1,0;21,4\n")
SAID = {"delimiter": "semicolon", "decimal": ",", "encoding": "utf-8", "skip_lines": "2", "header": "on",
        "skip_after_header": "0", "comment": "", "missing": "", "time1": "1", "time2": "2", "format": "own",
        "codes": "%d.%m.%Y %H:%M:%S", "zone": "UTC", "at_turn_back": "set aside", "port1-column": "3", "port1-unit": "uW",
        "port1-factor": "", "port2-column": "4", "port2-unit": "uW", "port2-factor": "1", "act": "look"}


@pytest.fixture(autouse=True)
def files_apart(settings, tmp_path):
    settings.MEDIA_ROOT = tmp_path


@pytest.fixture
def owner():
    return make_person(Role.OWNER)


@pytest.fixture
def tap(owner):
    return make_tap(make_station("bench-a", owner=owner), "out", kind=TapKind.TWO_PORT, unit=Unit.MILLIWATT)


@pytest.fixture
def page(client, owner, tap):
    client.force_login(owner)

    def send(content=FILE, name="log.csv"):
        content = content if isinstance(content, bytes) else content.encode()
        answer = client.post("/stations/bench-a/import/", {"tap": tap.name, "file": SimpleUploadedFile(name, content)})
        assert answer.status_code == 302, answer.content.decode()
        return answer.url

    client.send = send
    return client


def text_of(answer) -> str:
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", answer.content.decode()))


def test_the_first_lines_are_shown_with_a_proposal(page):
    answer = page.get(page.send())
    assert answer.status_code == 200
    said = answer.content.decode()
    assert "04.03.2031;12:00:03;1000,0;1,0;21,4" in said
    assert "about 7 lines" in said
    assert "1 s apart" in said
    layout, columns = answer.context["layout"], answer.context["columns"]
    assert (layout["delimiter"].value(), layout["decimal"].value(), layout["skip_lines"].value()) == ("semicolon", ",", 2)
    assert (columns["time1"].value(), columns["time2"].value(), columns["codes"].value()) == ("1", "2", "%d.%m.%Y %H:%M:%S")
    assert columns["zone"].value() == "" and columns["port1-column"].value() == "3" and columns["port1-unit"].value() == "uW"


def test_looking_stores_nothing_and_shows_what_the_rows_become(page, tap):
    """1 mW over 1 µW is 30 dB, over 10 µW 20 dB (definition of the decibel)."""
    answer = page.post(page.send(), SAID)
    said = text_of(answer)
    assert answer.status_code == 200
    assert "Of the first 4 rows, 3 can be read; 1 would be set aside." in said
    assert "30.0 dB" in said and "20.0 dB" in said and "2031-03-04 12:00:01.000" in said
    assert "&quot;x&quot; is not a number" in answer.content.decode()
    assert not len(read_readings(tap.pk, 0, 2**62)) and FileImport.objects.get().rules is None


def test_a_small_file_is_read_in_at_once(page, tap):
    address = page.send()
    assert page.post(address, SAID | {"act": "read"}).url == address
    said = text_of(page.get(address))
    assert "4 rows: 3 stored, 0 known, 1 set aside." in said
    assert read_readings(tap.pk, 0, 2**62).column("port1").tolist() == [1.0, 1.0, 1.0]
    record = FileImport.objects.get()
    assert not default_storage.exists(f"imports/{record.sha256}")
    entry = AuditEntry.objects.get(action="read a file in")
    assert entry.person == tap.station.bench.owner and entry.after["sha256"] == record.sha256


def test_the_same_file_packed_is_known_and_the_mapping_was_kept(page):
    page.post(page.send(), SAID | {"act": "read"})
    address = page.send(gzip.compress(FILE.encode()), "log.csv.gz")
    assert page.get(address).context["columns"]["zone"].value() == "UTC"
    page.post(address, SAID | {"act": "read"})
    assert "4 rows: 0 stored, 3 known, 1 set aside." in text_of(page.get(address))


def test_a_large_file_goes_to_the_worker_and_shows_its_progress(page, monkeypatch, tap):
    asked = []
    monkeypatch.setattr("labmon.pipeline.imports.ROWS_AT_ONCE", 2)
    monkeypatch.setattr("labmon.pipeline.imports.ask_worker", asked.append)
    address = page.send()
    page.post(address, SAID | {"act": "read"})
    answer = page.get(address)
    assert "0 % read" in text_of(answer) and "<progress" in answer.content.decode()
    record = FileImport.objects.get()
    assert asked == [record.pk]
    import_upload(record.pk)
    assert "3 stored" in text_of(page.get(address))
    import_upload(record.pk)                       # a second delivery changes nothing
    assert len(read_readings(tap.pk, 0, 2**62)) == 3


def test_an_import_that_no_task_finished_is_taken_up(page, monkeypatch):
    taken = []
    monkeypatch.setattr("labmon.pipeline.imports.ROWS_AT_ONCE", 2)
    monkeypatch.setattr("labmon.pipeline.imports.ask_worker", lambda import_id: None)
    monkeypatch.setattr("labmon.pipeline.imports.import_upload_task.delay", taken.append)
    page.post(page.send(), SAID | {"act": "read"})
    take_up_left_imports_task()
    assert taken == []                             # it may be running still
    FileImport.objects.update(started_at="2020-01-01T00:00Z")
    take_up_left_imports_task()
    assert taken == [FileImport.objects.get().pk]


def test_the_worker_knows_the_tasks():
    app.loader.import_default_modules()
    assert {"labmon.pipeline.import_upload", "labmon.pipeline.take_up_left_imports"} <= set(app.tasks)


def test_an_upload_nobody_reads_in_is_let_go(page):
    address = page.send()
    FileImport.objects.update(started_at="2020-01-01T00:00Z")
    take_up_left_imports_task()
    assert "the upload was let go" in text_of(page.get(address))
    assert default_storage.listdir("imports")[1] == []


@pytest.mark.parametrize(("change", "field", "says"), [
    ({"zone": ""}, "zone", "Times of this format have no zone"),
    ({"zone": "Europe/Berln"}, "zone", "Is no time zone; write a name such as"),
    ({"codes": "%H"}, "codes", "Does not give date and time"),
    ({"format": "seconds since"}, "since", "A counted time needs a start"),
    ({"time1": ""}, "time1", "This field is required"),
    ({"port2-factor": "0"}, "port2-factor", "Would make every value the same"),
])
def test_a_fault_stands_at_its_field(page, change, field, says):
    answer = page.post(page.send(), SAID | change)
    assert answer.status_code == 422
    assert says in answer.context["columns"].errors[field][0]
    assert says in answer.content.decode()


@pytest.mark.parametrize(("change", "says"), [
    ({"port2-column": ""}, "two-port tap needs port1 and port2"),
    ({"encoding": "klingon"}, "Is not an encoding known here"),
    ({"decimal": ",", "delimiter": "comma"}, "Is also the delimiter"),
    ({"skip_lines": "-1"}, "greater than or equal to 0"),
])
def test_other_faults_are_told_too(page, change, says):
    answer = page.post(page.send(), SAID | change)
    assert answer.status_code == 422 and says in answer.content.decode()


def test_an_empty_file_is_refused_with_a_remedy(page, tap):
    answer = page.post("/stations/bench-a/import/", {"tap": tap.name, "file": SimpleUploadedFile("log.csv", b"")})
    assert answer.status_code == 422 and "The file is empty. Choose the file with the readings." in answer.content.decode()


def test_a_file_above_the_limit_is_refused_with_a_remedy(page, tap, monkeypatch):
    monkeypatch.setattr("labmon.screen.import_forms.LARGEST_FILE_MB", 0.0001)
    answer = page.post("/stations/bench-a/import/", {"tap": tap.name, "file": SimpleUploadedFile("log.csv", b"1" * 101)})
    assert answer.status_code == 422 and "cut it in parts, or use manage.py import_csv" in answer.content.decode()


@pytest.mark.parametrize("content", [b"\x1f\x8b broken", bytes(range(256)) * 3, b"\xff\xfe", b'"""', b"\x00\n\x00\n"])
def test_any_bytes_give_a_page(page, content):
    address = page.send(content)
    assert page.get(address, follow=True).status_code == 200
    assert page.post(address, SAID, follow=True).status_code in {200, 422}
    assert page.post(address, SAID | {"act": "read"}, follow=True).status_code in {200, 422}


@pytest.mark.parametrize(("role", "status"), [(Role.MANAGER, 200), (Role.RESEARCHER, 403), (Role.OWNER, 403), (Role.GUEST, 404)])
def test_the_benchs_owner_and_managers_may(client, tap, role, status):
    client.force_login(make_person(role))
    assert client.get("/stations/bench-a/import/").status_code == status


def test_who_is_not_signed_in_is_sent_to_sign_in(client, tap):
    assert client.get("/stations/bench-a/import/").url.startswith("/login/")
    assert client.post("/stations/bench-a/import/1/").url.startswith("/login/")


def test_another_stations_import_is_not_shown(page, owner):
    other = make_tap(make_station("bench-b", owner=owner), "out")
    record = FileImport.objects.create(tap=other, file_name="x", sha256="0" * 64)
    assert page.get(f"/stations/bench-a/import/{record.pk}/").status_code == 404
