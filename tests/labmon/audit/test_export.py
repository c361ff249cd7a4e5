import csv
import io
import json
from hashlib import sha256

import pytest
from hypothesis import given
from hypothesis import strategies as st

from labmon.audit.actions import note
from labmon.audit.export import CHAIN_START, ExportForm, chained, exported
from labmon.audit.models import AuditEntry
from tests.factories import make_station, make_tap

texts = st.text(st.characters(exclude_categories=["Cs"]), max_size=10)
entries = st.lists(st.dictionaries(texts, st.one_of(st.integers(), texts, st.none()), max_size=3), max_size=6)


def digest_of(lines: list[dict]) -> str:
    """Made anew from docs/operations.md, without a word of our code: SHA-256 over the chain before and the sorted, tight JSON."""
    chain = "0" * 64
    for line in lines:
        bare = {name: value for name, value in line.items() if name != "chain"}
        text = json.dumps(bare, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        chain = sha256(chain.encode() + text.encode()).hexdigest()
    return chain


def test_the_digest_is_the_standards():
    """FIPS 180-4 (the function's own example is SHA-256 of "abc"; from memory)."""
    assert sha256(b"abc").hexdigest() == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert CHAIN_START == "0" * 64


@given(entries)
def test_each_line_carries_all_before_it(lines):
    out = list(chained(lines))
    assert [one["chain"] for one in out] == [digest_of(lines[: number + 1]) for number in range(len(lines))]


@given(entries.filter(lambda lines: len(lines) > 1), st.data())
def test_a_changed_missing_or_moved_line_breaks_the_chain(lines, data):
    out = list(chained(lines))
    at = data.draw(st.integers(0, len(out) - 2))
    changed = [dict(one) for one in out]
    changed[at]["tampered"] = 1
    assert digest_of(changed) != out[-1]["chain"]
    assert digest_of(out[:at] + out[at + 1 :]) != out[-1]["chain"]


@pytest.mark.django_db
def test_both_forms_hold_the_same():
    tap = make_tap(make_station("n1"), "in")
    note(None, "set calibration", tap, {"zero1": 0.0}, {"zero1": 1e-9}, 'said "so", twice\nand µ')
    note(None, "=1+2", "station/n1", reason="@formula")
    rows = list(AuditEntry.objects.order_by("-pk"))
    lines = [json.loads(line) for line in b"".join(exported(rows, ExportForm.JSON_LINES, has_chain=True)).splitlines()]
    assert lines[-1]["chain"] == digest_of(lines) and lines[1]["after"] == {"zero1": 1e-9}
    table = list(csv.DictReader(io.StringIO(b"".join(exported(rows, ExportForm.CSV, has_chain=True)).decode(), newline="")))
    assert [row["chain"] for row in table] == [line["chain"] for line in lines]
    assert table[1]["reason"] == 'said "so", twice\nand µ' and json.loads(table[1]["before"]) == {"zero1": 0.0}
    assert table[0]["action"] == "'=1+2" and table[0]["reason"] == "'@formula"
    assert "chain" not in json.loads(next(exported(rows, ExportForm.JSON_LINES, has_chain=False)))
