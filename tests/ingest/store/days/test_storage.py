"""A day file lies in its folder whole or not at all."""

import os
from pathlib import Path

import pytest
from django.core.files.base import ContentFile

from ingest.store.days.storage import DayFolder


class Breaking(ContentFile):
    """A content that ends with a fault after its first piece."""

    def chunks(self, chunk_size=None):
        yield b"PAR1"
        raise OSError("the disk is full")


@pytest.fixture
def folder(tmp_path):
    return DayFolder(location=tmp_path / "days")


def files(tmp_path):
    return [path.name for path in tmp_path.rglob("*") if path.is_file()]


def test_saved_content_is_read_back(folder):
    assert folder.save("b08/eom-in/one.parquet", ContentFile(b"PAR1")) == "b08/eom-in/one.parquet"
    with folder.open("b08/eom-in/one.parquet", "rb") as file:
        assert file.read() == b"PAR1"


def test_a_fault_while_writing_leaves_nothing(folder, tmp_path):
    with pytest.raises(OSError, match="full"):
        folder.save("b08/one.parquet", Breaking(b""))
    assert files(tmp_path) == [] and not folder.exists("b08/one.parquet")


def test_it_is_synchronised_before_it_has_its_name(folder, tmp_path, monkeypatch):
    seen = []
    true_fsync, true_rename = os.fsync, Path.rename
    monkeypatch.setattr(os, "fsync", lambda number: (seen.append("fsync"), true_fsync(number))[1])
    monkeypatch.setattr(Path, "rename", lambda self, to: (seen.append("rename"), true_rename(self, to))[1])
    folder.save("one.parquet", ContentFile(b"PAR1"))
    assert seen[-3:] == ["fsync", "rename", "fsync"]


def test_a_name_is_never_written_twice(folder):
    folder.save("one.parquet", ContentFile(b"first"))
    with pytest.raises(FileExistsError, match="never written twice"):
        folder.save("one.parquet", ContentFile(b"second"))
    with folder.open("one.parquet") as file:
        assert file.read() == b"first"


def test_deleting_takes_parts_of_killed_writers_along(folder, tmp_path):
    (tmp_path / "days/b08").mkdir(parents=True)
    (tmp_path / "days/b08/.one.parquet.0a1b2c3d.part").write_bytes(b"half")
    folder.delete("b08/one.parquet")
    assert files(tmp_path) == []
