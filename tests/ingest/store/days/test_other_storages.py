"""Day files behind other storages than a folder of ours: Django's own two, and one that can do no more than an object store."""

import io

import pytest
from django.core.files.base import ContentFile, File
from django.core.files.storage import Storage
from django.core.management import CommandError, call_command

from ingest.models import DayFile, LeftFile
from ingest.store.days.forget import forget_day
from ingest.store.days.left import sweep_left_files
from ingest.store.days.seal import seal_day
from ingest.store.days.storage import days_storage
from ingest.store.read import DamagedStore, read_readings
from labmon.disk.queries import lab_health
from tests.ingest.conftest import EVER, two_port
from tests.ingest.store.days.conftest import DAY_US, late
from tests.ingest.store.test_codec import assert_same

pytestmark = pytest.mark.django_db(transaction=True)
OURS = "tests.ingest.store.days.test_other_storages.ObjectStore"


class ObjectStore(Storage):
    """What every object store has: put and get of whole objects, a list by prefix. No folders, no paths, nothing seekable
    before it is fetched, and an object appears whole or not at all."""

    objects: dict[str, bytes] = {}

    def _save(self, name: str, content: File) -> str:
        self.objects[name] = b"".join(content.chunks())
        return name

    def _open(self, name: str, mode: str = "rb") -> File:
        if name not in self.objects:
            raise FileNotFoundError(name)
        return File(io.BytesIO(self.objects[name]), name)

    def delete(self, name: str) -> None:
        self.objects.pop(name, None)

    def exists(self, name: str) -> bool:
        return name in self.objects

    def size(self, name: str) -> int:
        return len(self.objects[name])

    def listdir(self, path: str) -> tuple[list[str], list[str]]:
        prefix = f"{path}/" if path else ""
        below = [name.removeprefix(prefix) for name in self.objects if name.startswith(prefix)]
        return sorted({one.split("/")[0] for one in below if "/" in one}), sorted(one for one in below if "/" not in one)


@pytest.fixture(params=["object store", "in memory", "plain folder elsewhere"])
def other(request, settings, tmp_path):
    """The lab's day files lie there now."""
    ObjectStore.objects.clear()
    backend = {
        "object store": {"BACKEND": OURS},
        "in memory": {"BACKEND": "django.core.files.storage.InMemoryStorage"},
        "plain folder elsewhere": {"BACKEND": "django.core.files.storage.FileSystemStorage",
                                   "OPTIONS": {"location": str(tmp_path / "elsewhere")}},
    }[request.param]
    settings.STORAGES = settings.STORAGES | {"days": backend}
    return days_storage()


@pytest.fixture
def day(other, sender):
    """30 readings of a past day."""
    from ingest.store.seal import seal_tap

    for first in (0, 700, 40_000):
        sender.send(two_port(first, 10, start_us=DAY_US))
    seal_tap(sender.tap().pk)
    return sender


def test_a_day_is_sealed_read_back_merged_with_late_readings_and_swept(day, other):
    tap, before = day.tap().pk, day.stored()
    assert seal_day(tap, DAY_US)
    first = DayFile.objects.get()
    assert other.exists(first.name) and other.size(first.name) == first.size
    assert_same(before, day.stored())
    late(day)
    assert seal_day(tap, DAY_US) and len(day.stored()) == 35
    assert sweep_left_files(older_s=-1) == 1 and not other.exists(first.name)
    call_command("verify_store")
    again = day.send(two_port(0, 10, start_us=DAY_US))
    assert (again["stored"], again["known"]) == (0, 10)


def test_damage_is_found_and_never_read_as_data(day, other):
    seal_day(day.tap().pk, DAY_US)
    row = DayFile.objects.get()
    with other.open(row.name, "rb") as file:
        whole = bytearray(file.read())
    whole[len(whole) // 3] ^= 1
    other.delete(row.name)
    other.save(row.name, ContentFile(bytes(whole)))
    with pytest.raises(DamagedStore, match="restore this file from a backup"):
        read_readings(day.tap().pk, *EVER)
    with pytest.raises(CommandError, match="1 of 1 day files"):
        call_command("verify_store")


def test_it_is_backed_up_forgotten_and_reckoned_with(day, other, settings, tmp_path):
    from django.db import transaction

    settings.MEDIA_ROOT = tmp_path / "files"
    seal_day(day.tap().pk, DAY_US)
    row = DayFile.objects.get()
    call_command("backup", str(tmp_path / "backup"))
    assert (tmp_path / "backup" / "days" / row.name).stat().st_size == row.size
    assert lab_health().forecast.basis_days == 1
    with transaction.atomic():
        assert forget_day(day.tap().pk, DAY_US, "a rule").count == 30
    assert sweep_left_files(older_s=-1) == 1 and not other.exists(row.name) and not LeftFile.objects.exists()
