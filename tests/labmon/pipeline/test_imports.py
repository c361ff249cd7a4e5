import io

import pytest
from django.core.files.storage import default_storage
from kombu.exceptions import OperationalError

from ingest.files.importing import ImportBusy
from ingest.files.mapping import mapping_from_toml
from ingest.files.saved import record_import
from ingest.models import FileImport
from ingest.store.read import read_readings
from labmon.people.models import Role
from labmon.pipeline import imports
from labmon.pipeline.imports import begin_import, import_upload, keep_upload, place_of
from tests.factories import make_person, make_tap

pytestmark = pytest.mark.django_db
FILE = b"t,a,b\n2031-03-04 12:00:00,1,0.001\n"


@pytest.fixture(autouse=True)
def files_apart(settings, tmp_path):
    settings.MEDIA_ROOT = tmp_path


@pytest.fixture
def mapping():
    text = '[time]\ncolumn = "t"\nzone = "UTC"\n[columns]\nport1 = "a"\nport2 = "b"\n'
    return mapping_from_toml(text, kind="two-port", unit="W")


def kept(tap, content: bytes = FILE) -> FileImport:
    record = record_import(tap, "log.csv", io.BytesIO(content))
    keep_upload(record, io.BytesIO(content))
    return record


def test_two_uploads_of_one_file_are_one_until_both_are_read_in(mapping):
    manager = make_person(Role.MANAGER)
    first, second = kept(make_tap()), kept(make_tap())
    assert default_storage.listdir("imports")[1] == [first.sha256]
    begin_import(first, mapping, by=manager)
    assert default_storage.exists(place_of(second))
    begin_import(second, mapping, by=manager)
    assert not default_storage.exists(place_of(second))
    assert len(read_readings(first.tap_id, 0, 2**62)) == len(read_readings(second.tap_id, 0, 2**62)) == 1


def test_a_lost_upload_is_told(mapping):
    record = kept(make_tap())
    default_storage.delete(place_of(record))
    begin_import(record, mapping, by=None)
    record.refresh_from_db()
    assert record.error == "the upload is gone; send the file again" and record.finished_at


def test_a_mapping_that_does_not_fit_is_kept_as_the_reason(mapping):
    record = kept(make_tap(), b"t,A,b\n")
    begin_import(record, mapping, by=None)
    record.refresh_from_db()
    assert "is not in the header line" in record.error and record.finished_at


def test_a_tap_in_use_hands_the_file_to_the_worker(mapping, monkeypatch):
    asked = []

    def busy(*args, **kwargs):
        raise ImportBusy("another file is being read in for this tap; try again when it is done")

    monkeypatch.setattr(imports, "import_file", busy)
    monkeypatch.setattr(imports, "ask_worker", asked.append)
    record = kept(make_tap())
    begin_import(record, mapping, by=None)
    record.refresh_from_db()
    assert asked == [record.pk] and record.finished_at is None and default_storage.exists(place_of(record))


def test_a_dead_broker_costs_the_hint_only(mapping, monkeypatch, django_capture_on_commit_callbacks):
    def away(import_id):
        raise OperationalError("no broker")

    monkeypatch.setattr(imports.import_upload_task, "delay", away)
    with django_capture_on_commit_callbacks(execute=True):
        imports.ask_worker(1)


def test_what_nobody_asked_for_is_not_read_in():
    record = kept(make_tap())
    import_upload(record.pk)
    import_upload(record.pk + 1000)
    record.refresh_from_db()
    assert record.finished_at is None and default_storage.exists(place_of(record))
