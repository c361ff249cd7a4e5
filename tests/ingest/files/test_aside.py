import pytest

from ingest.files.aside import TEXT_KEPT, set_rows_aside
from ingest.files.faults import RefusedRow
from ingest.models import FileImport, SetAside
from tests.factories import make_tap

pytestmark = pytest.mark.django_db


def row(text: str, line: int = 1) -> RefusedRow:
    return RefusedRow(line, text, "port1", f'"{text}" is not a number', "correct the line")


def test_a_line_is_listed_once_wherever_it_stands():
    record = FileImport.objects.create(tap=make_tap(), file_name="a.csv", sha256="")
    set_rows_aside(record, "file-1", [row("x", 1), row("x", 9), row("y", 2)])
    set_rows_aside(FileImport.objects.create(tap=record.tap, file_name="b.csv", sha256=""), "file-2", [row("y", 5), row("z", 6)])
    kept = [one["text"] for one in SetAside.objects.order_by("pk").values_list("reading", flat=True)]
    assert kept == ["x", "y", "z"]
    set_rows_aside(FileImport.objects.create(tap=make_tap(), file_name="a.csv", sha256=""), "file-1", [row("x")])
    assert SetAside.objects.count() == 4


@pytest.mark.parametrize("text", ["\x00", "\ud800", "é" * 70_000, "\\", "'\"", "\N{GRINNING FACE}"])
def test_any_text_can_be_kept(text):
    record = FileImport.objects.create(tap=make_tap(), file_name="a.csv", sha256="")
    set_rows_aside(record, "file-1", [row(text)])
    kept = SetAside.objects.get()
    assert len(kept.reading["text"]) <= TEXT_KEPT and len(kept.why) <= 300
