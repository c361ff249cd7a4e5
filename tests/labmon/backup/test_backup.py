"""A backup has a list and is whole, or it is refused; nothing is overwritten without a word."""

import json

import pytest
from django.core.management import CommandError, call_command

from ingest.models import DayFile
from ingest.store.days.seal import seal_days
from ingest.store.days.storage import days_storage
from labmon.backup.manifest import BackupFault, read_manifest
from labmon.backup.restore import restore_backup
from tests.factories import make_station, make_tap, store_readings

pytestmark = pytest.mark.django_db(transaction=True)
OLD_US = 1_750_000_000_000_000


@pytest.fixture
def backed_up(tmp_path, settings):
    """A lab with a day file, and its backup."""
    settings.MEDIA_ROOT = tmp_path / "files"
    (tmp_path / "files").mkdir()
    (tmp_path / "files" / "run.csv").write_text("a;b\n1;2\n")
    store_readings(make_tap(), [OLD_US, OLD_US + 5], port1=1e-3, port2=1e-6)
    seal_days()
    call_command("backup", str(tmp_path / "backup"))
    return tmp_path / "backup"


def test_it_holds_database_day_files_uploads_and_key_with_their_digests(backed_up, settings):
    manifest = read_manifest(backed_up)
    name = DayFile.objects.get().name
    assert set(manifest.files) == {"database.dump", f"days/{name}", "files/run.csv", "secret-key"}
    assert manifest.files[f"days/{name}"][1] == bytes(DayFile.objects.get().sha256).hex()
    assert (backed_up / "secret-key").read_text().strip() == settings.SECRET_KEY
    assert (backed_up / "secret-key").stat().st_mode & 0o077 == 0 and backed_up.stat().st_mode & 0o077 == 0


def test_a_folder_with_something_in_it_is_refused(backed_up):
    with pytest.raises(CommandError, match="new folder for each backup"):
        call_command("backup", str(backed_up))


def test_a_missing_day_file_makes_the_backup_fail_and_leaves_no_list(tmp_path):
    store_readings(make_tap(), [OLD_US, OLD_US + 5], port1=1e-3, port2=1e-6)
    seal_days()
    days_storage().delete(DayFile.objects.get().name)
    with pytest.raises(CommandError, match="cannot be copied.*verify_store"):
        call_command("backup", str(tmp_path / "backup"))
    with pytest.raises(BackupFault, match="is no backup"):
        read_manifest(tmp_path / "backup")


@pytest.mark.parametrize("name", ["database.dump", "files/run.csv"])
def test_a_damaged_backup_is_refused_before_anything_is_touched(backed_up, name):
    whole = bytearray((backed_up / name).read_bytes())
    whole[-1] ^= 1
    (backed_up / name).write_bytes(whole)
    with pytest.raises(BackupFault, match=f"{name} is not what was written.*Nothing was changed"):
        restore_backup(backed_up, print, may_overwrite=True)
    assert DayFile.objects.count() == 1


def test_a_lab_that_holds_something_is_not_overwritten_without_a_word(backed_up):
    make_station("precious")
    with pytest.raises(BackupFault, match="2 stations.*--overwrite"):
        restore_backup(backed_up, print)


def test_a_list_of_another_form_is_refused(backed_up):
    said = json.loads((backed_up / "manifest.json").read_text())
    (backed_up / "manifest.json").write_text(json.dumps(said | {"form": "labmon backup 9"}))
    with pytest.raises(BackupFault, match="backup 9"):
        restore_backup(backed_up, print)
