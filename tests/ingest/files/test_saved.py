import hashlib
import io

import pytest

from ingest.files.faults import MappingError
from ingest.files.mapping import mapping_from_toml
from ingest.files.saved import ask_for_import, record_import, save_mapping, saved_mapping, saved_rules
from ingest.models import ColumnMapping
from tests.factories import make_tap

pytestmark = pytest.mark.django_db
TEXT = '[time]\ncolumn = "t"\nzone = "UTC"\n[columns]\nport1 = "a"\nport2 = "b"\n'


def mapping(text: str = TEXT):
    return mapping_from_toml(text, kind="two-port", unit="W")


def test_one_mapping_a_tap_the_last_one():
    tap = make_tap()
    with pytest.raises(MappingError, match="none is saved"):
        saved_mapping(tap)
    save_mapping(tap, mapping())
    save_mapping(tap, mapping(TEXT.replace("UTC", "Europe/Berlin")))
    assert saved_mapping(tap).time.zone == "Europe/Berlin" and ColumnMapping.objects.count() == 1


def test_the_start_of_a_count_is_not_kept_for_the_next_file():
    tap = make_tap()
    save_mapping(tap, mapping(TEXT.replace('zone = "UTC"', 'format = "seconds since"\nsince = 2031-03-04T12:00:00Z')))
    assert "since" not in saved_rules(tap)["time"] and "since" in ColumnMapping.objects.get().rules["time"]


def test_a_record_knows_the_file_by_content():
    raw = io.BytesIO(b"1\n2\n3\n")
    record = record_import(make_tap(), "../../etc/log.csv", raw)
    assert (record.file_name, record.rows_total, raw.tell()) == ("log.csv", 3, 0)
    assert record.sha256 == hashlib.sha256(b"1\n2\n3\n").hexdigest()
    assert record.rules is None
    ask_for_import(record, mapping())
    record.refresh_from_db()
    assert record.rules["columns"]["port1"]["column"] == "a"
