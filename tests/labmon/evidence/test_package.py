"""A package is a valid bag and holds what it says."""

import csv
import io
import json
import re
import xml.etree.ElementTree as ET
import zipfile
from datetime import timedelta

import bagit
import numpy as np
import pandas as pd
import pytest

from ingest.times import at_of
from labmon.evidence import recompute
from labmon.evidence.package import NotAsMade, Order, write_evidence
from labmon.evidence.pdf import can_write_pdf
from labmon.runs.ledgers import Unusable
from tests.factories import make_station, make_tap
from tests.labmon.evidence.conftest import (
    HOUR,
    MADE_AT,
    NOON_US,
    SECOND_US,
    ledger_of,
    rule,
    run_of,
    unpacked,
    write_er,
    written,
)

CLASSES = ("good_s", "below_limit_s", "no_reading_s", "untrusted_s")


def csv_rows(path):
    return list(csv.DictReader(io.StringIO(path.read_text(encoding="utf-8"))))


def test_ten_hours_of_the_job_paper_to_the_second(ten_hours, tmp_path):
    """JOB 7a, row 11: good 9 h 00, below 0:20, no reading 0:30, untrusted 0:10; sum 10 h."""
    content, totals = written(ten_hours)
    assert [totals[name] for name in CLASSES] == [9 * 3600, 1200, 1800, 600] and totals["length_s"] == 36_000
    rows = csv_rows(unpacked(content, tmp_path) / "data/ledger.csv")
    assert [(row["class"], row["length_s"]) for row in rows] == [
        ("good", "3600"), ("below limit", "1200"), ("good", "6000"), ("no reading", "1800"), ("good", "5400"),
        ("untrusted", "600"), ("good", "17400")]
    assert rows[1]["from"] == "2024-03-04T13:00:00.000000Z" and rows[1]["why"] == "Extinction ratio below its limit"
    assert rows[5]["why"] == "Port saturated" and rows[1]["taps"] == "bench-a/in"


def test_the_library_of_congress_finds_it_valid(ten_hours, tmp_path):
    """RFC 8493 by somebody else's reader: bagit-python of the Library of Congress."""
    bag = bagit.Bag(str(unpacked(written(ten_hours)[0], tmp_path)))
    bag.validate()
    assert bag.version_info == (1, 0) and bag.algorithms == ["sha256"]
    assert bag.info["External-Identifier"] == f"labmon-run-{ten_hours.pk}-evidence-1"
    assert bag.info["Bagging-Date"] == "2024-03-06"
    sizes = [path.stat().st_size for path in tmp_path.rglob("data/**/*") if path.is_file()]
    assert bag.info["Payload-Oxum"] == f"{sum(sizes)}.{len(sizes)}"


def test_a_changed_byte_is_found_by_that_reader_too(ten_hours, tmp_path):
    bag = unpacked(written(ten_hours)[0], tmp_path)
    path = bag / "data/readings/bench-a__in.csv"
    content = bytearray(path.read_bytes())
    content[5000] ^= 1
    path.write_bytes(content)
    with pytest.raises(bagit.BagValidationError, match="bench-a__in.csv"):
        bagit.Bag(str(bag)).validate()


def test_what_it_holds(ten_hours, tmp_path):
    bag = unpacked(written(ten_hours)[0], tmp_path)
    held = {path.relative_to(bag).as_posix() for path in bag.rglob("*") if path.is_file()}
    assert held - {"data/report.pdf"} == {
        "bagit.txt", "bag-info.txt", "manifest-sha256.txt", "tagmanifest-sha256.txt", "README.txt", "recompute.py",
        "data/run.json", "data/limits.csv", "data/calibrations.csv", "data/ledger.csv", "data/ledger.json", "data/statement.txt",
        "data/report.html", "data/figures/ledger.svg", "data/figures/bench-a__in.svg",
        *(f"data/readings/bench-a__in.{ending}" for ending in ("csv", "parquet", "columns.json"))}
    assert ("data/report.pdf" in held) == can_write_pdf()
    run = json.loads((bag / "data/run.json").read_text())
    assert run["run"]["from"] == "2024-03-04T12:00:00.000000Z" and run["software"]["version"]
    assert run["taps"][0]["limits"][0]["alarm"] == 20.0 and run["taps"][0]["calibrations"][0]["saturation1"] == 5e-3
    assert csv_rows(bag / "data/limits.csv")[0]["reason"] == "the trap needs it"


def test_readings_are_the_same_in_both_forms_and_described(ten_hours, tmp_path):
    bag = unpacked(written(ten_hours)[0], tmp_path)
    table = pd.read_parquet(bag / "data/readings/bench-a__in.parquet")
    text = pd.read_csv(bag / "data/readings/bench-a__in.csv", low_memory=False)
    facts = json.loads((bag / "data/readings/bench-a__in.columns.json").read_text())
    assert [one["name"] for one in facts["columns"]] == list(table.columns) == list(text.columns)
    assert {one["name"]: one["unit"] for one in facts["columns"]}["raw_port1_W"] == "W"
    assert all(one["meaning"] for one in facts["columns"])
    assert len(table) == 36_000 - 1800 and (pd.to_datetime(text["at"]) == table["at"]).all()
    for name in ("raw_port1_W", "raw_port2_W", "er_db"):
        np.testing.assert_array_equal(text[name], table[name])
    below = text["er_db"][(text["at"] >= "2024-03-04T13:00:00") & (text["at"] < "2024-03-04T13:20:00")]
    np.testing.assert_allclose(below, 19.0, atol=1e-9)


def test_page_and_figures_are_whole_and_carry_no_program(ten_hours, tmp_path):
    bag = unpacked(written(ten_hours)[0], tmp_path)
    page = (bag / "data/report.html").read_text(encoding="utf-8")
    assert "<script" not in page and not re.search(r"\son\w+=|javascript:|https?://(?!www.w3.org/2000/svg)", page)
    assert "9 h 00 min 00 s of 10 h 00 min 00 s were good (90.0 %)" in page
    ids = re.findall(r'\sid="([^"]+)"', page)
    assert len(ids) == len(set(ids)), "two drawings on one page share no name"
    for path in (bag / "data/figures").iterdir():
        assert ET.fromstring(path.read_text(encoding="utf-8")).tag == "{http://www.w3.org/2000/svg}svg"
    if can_write_pdf():
        assert (bag / "data/report.pdf").read_bytes()[:5] == b"%PDF-"


def test_the_paragraph_for_the_paper(ten_hours, tmp_path):
    said = (unpacked(written(ten_hours)[0], tmp_path) / "data/statement.txt").read_text(encoding="utf-8")
    assert said.count("\n") == 1
    for part in ("from 2024-03-04T12:00:00Z to 2024-03-04T22:00:00Z (10 h 00 min 00 s)",
                 "Wanted was an extinction ratio at least 20.0 dB at bench-a/in.",
                 "This was met for 9 h 00 min 00 s of the time (90.0 %), missed for 20 min 00 s (3.3 %)",
                 "for untrusted readings for 10 min 00 s (1.7 %)", "for want of readings for 30 min 00 s (5.0 %)"):
        assert part in said, said


def bytes_of(ledger):
    file = io.BytesIO()
    write_evidence(file, Order(ledger, 1, MADE_AT))
    return file.getvalue()


def test_no_pdf_where_pango_is_missing(ten_hours, tmp_path, monkeypatch):
    monkeypatch.setattr("labmon.evidence.package.can_write_pdf", lambda: False)
    ledger = ledger_of(ten_hours)
    assert bytes_of(ledger) == bytes_of(ledger), "without a PDF (which carries its own stamp) every byte follows from the order"
    assert not (unpacked(bytes_of(ledger), tmp_path) / "data/report.pdf").exists()


def test_readings_that_came_later_want_a_new_version(ten_hours):
    """The package never goes with a ledger that its readings do not make."""
    ledger = ledger_of(ten_hours)
    write_er(ten_hours.taps.get(), np.arange(3 * HOUR, 3 * HOUR + 60), 30.0, boot="spool")
    with pytest.raises(NotAsMade, match=r"60 s are another class now, the first at 2024-03-04T15:00:00.000000Z. Make a new"):
        bytes_of(ledger)
    bytes_of(ledger_of(ten_hours))


def test_what_a_person_declared_is_not_good(ten_hours, tmp_path):
    begin = ten_hours.starts_at
    content, totals = written(ten_hours, unusable=[Unusable(begin, begin + timedelta(seconds=60), "beam realigned")])
    assert (totals["good_s"], totals["untrusted_s"]) == (9 * 3600 - 60, 660)
    bag = unpacked(content, tmp_path)
    assert recompute.check(bag)[0] == []
    assert json.loads((bag / "data/run.json").read_text())["declared_unusable"][0]["reason"] == "beam realigned"


def test_a_level_asked_for_afterwards_rules_and_the_one_in_force_stands_beside(ten_hours, tmp_path):
    limit = ten_hours.limits.get().limit_version.limit_id
    content, totals = written(ten_hours, levels={limit: 18.0})
    bag = unpacked(content, tmp_path)
    assert totals["below_limit_s"] == 0 and recompute.check(bag)[0] == []
    assert [(row["alarm"], row["in_force"]) for row in csv_rows(bag / "data/limits.csv")] == [("18.0", "20.0")]


def test_a_limit_changed_in_the_run_rules_from_then_on(db):
    tap = make_tap(make_station("bench-a"), "in", interval_s=1.0)
    write_er(tap, np.arange(HOUR), 22.0)
    run = run_of(tap, length_s=HOUR)
    rule(run, tap, "er_db", 25.0, at_of(NOON_US + 1000 * SECOND_US))
    totals = written(run)[1]
    assert (totals["good_s"], totals["below_limit_s"]) == (1000, 2600)


def test_memory_is_bounded_and_progress_told(ten_hours, monkeypatch):
    """Pieces are those of the store; a run of many pieces gives the same as one of one."""
    monkeypatch.setattr("labmon.evidence.package.can_write_pdf", lambda: False)
    ledger = ledger_of(ten_hours)
    told, file = [], io.BytesIO()
    whole = bytes_of(ledger)
    monkeypatch.setattr("labmon.api.chunks.READINGS_A_CHUNK", 2000)
    write_evidence(file, Order(ledger, 1, MADE_AT), told.append)
    assert sum(told) == 34_200 and len(told) > 5 and max(told) <= 4000
    name = f"labmon-run-{ten_hours.pk}-evidence-1/data/ledger.csv"
    assert zipfile.ZipFile(file).read(name) == zipfile.ZipFile(io.BytesIO(whole)).read(name)
