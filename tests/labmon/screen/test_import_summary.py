"""A whole file, reduced, in one sentence."""

import io

import pytest

from ingest.files.mapping import mapping_from_toml
from labmon.screen import import_summary
from labmon.screen.import_summary import summary_of
from tests.factories import make_tap

pytestmark = pytest.mark.django_db
MAPPING = '[time]\ncolumn = "Time"\nzone = "UTC"\n\n[columns]\nport1 = "A"\nport2 = "B"\n'


def summary(*lines: str) -> str:
    tap = make_tap()
    mapping = mapping_from_toml(MAPPING, kind=tap.kind, unit=tap.unit)
    raw = io.BytesIO("\n".join(["Time,A,B", *lines, ""]).encode())
    said = summary_of(raw, mapping, tap).replace("\xa0", " ")
    assert raw.tell() == 0
    return said


def test_the_mean_is_that_of_the_leak():
    """20 and 40 dB average to 22.97 dB (half of 0.01 and of 0.0001: 10 log10(1/0.00505)); by hand."""
    said = summary("2031-03-04 12:00:00,1e-3,1e-5", "2031-03-04 12:00:01,1e-3,1e-7", "2031-03-04 12:00:02,x,1e-7")
    assert said == ("The whole file: 2 readings from 2031-03-04 12:00:00 to 2031-03-04 12:00:01 UTC; 1 row would be set aside; "
                    "extinction ratio 20.0 dB to 40.0 dB, 23.0 dB over all (mean of leak); power 1.00 mW to 1.01 mW.")


def test_a_long_file_is_summed_up_by_its_first_rows(monkeypatch):
    monkeypatch.setattr(import_summary, "MOST_ROWS", 2)
    monkeypatch.setattr(import_summary, "ROWS_A_CHUNK", 2)
    assert summary(*(f"2031-03-04 12:00:0{second},1e-3,1e-6" for second in range(5))).startswith("Its first 2 rows: 2 readings")


def test_a_file_without_a_reading_says_so():
    assert summary("2031-03-04 12:00:00,x,y") == "The whole file: 1 row, none of them a reading."
