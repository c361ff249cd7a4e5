from datetime import UTC, datetime

import pytest

from ingest.files.rules import Rules


def test_entries_nobody_asked_for_are_told():
    rules = Rules({"a": "x", "b": 1}, "file")
    assert rules.text("a", default="") == "x"
    rules.end()
    [fault] = rules.faults
    assert (fault.key, fault.value) == ("file.b", 1) and "use a" in fault.do


@pytest.mark.parametrize(("take", "value", "default"), [
    (lambda rules: rules.text("k", default="d"), 1, "d"), (lambda rules: rules.whole("k", default=3), True, 3),
    (lambda rules: rules.whole("k", default=3), -1, 3), (lambda rules: rules.number("k", default=1.0), "1", 1.0),
    (lambda rules: rules.number("k", default=1.0), float("inf"), 1.0), (lambda rules: rules.truth("k", default=True), 0, True),
    (lambda rules: rules.texts("k", default=[]), [1], []), (lambda rules: rules.choice("k", ["a"], default="a"), "b", "a"),
    (lambda rules: rules.column("k"), 0, ""), (lambda rules: rules.columns("k", "one"), [], ())])
def test_a_wrong_type_is_a_fault_and_gives_the_default(take, value, default):
    rules = Rules({"k": value})
    assert take(rules) == default
    assert len(rules.faults) == 1 and rules.faults[0].why and rules.faults[0].do


def test_toml_dates_are_instants():
    assert Rules({"since": datetime(2031, 3, 4, 12, tzinfo=UTC)}).instant_text("since") == "2031-03-04T12:00:00+00:00"


def test_sub_tables_share_the_list_of_faults():
    top = Rules({"time": 3})
    top.table("time")
    top.table("columns")
    assert [fault.key for fault in top.faults] == ["time", "columns"]
