"""docs/bench-client.md says what the client does."""

import ast
import re

import pytest
from labmon_bench.function import FunctionSource
from labmon_bench.settings import FunctionSettings, read_settings

from tests.clients.bench.conftest import ROOT

PAGE = (ROOT / "docs" / "bench-client.md").read_text()
SOURCE = "".join(path.read_text() for path in sorted((ROOT / "clients" / "bench" / "labmon_bench").glob("*.py")))
BLOCKS = re.findall(r"^```ini settings\n(.*?)^```", PAGE, re.MULTILINE | re.DOTALL)


@pytest.mark.parametrize("number", range(len(BLOCKS)))
def test_each_example_of_settings_is_sound(tmp_path, number):
    (tmp_path / "bench.ini").write_text(BLOCKS[number])
    assert read_settings(tmp_path / "bench.ini").taps


def test_there_is_an_example_of_each_larger_source():
    shown = {re.search(r"^source = (\w+)", block, re.MULTILINE)[1] for block in BLOCKS}
    assert shown == {"instrument", "serial", "csv", "function"}


def test_the_example_of_a_function_is_one(tmp_path):
    (tmp_path / "ports.py").write_text(re.search(r"^```python function\n(.*?)^```", PAGE, re.MULTILINE | re.DOTALL)[1])
    (reading,), _ = FunctionSource("eom-in", FunctionSettings(tmp_path / "ports.py", "read_ports")).read()
    assert reading.values == {"port1": 0.998, "port2": 0.0011, "temperature_c": 21.4}


def test_every_setting_stands_on_the_page_and_no_other():
    """Names asked for in the code against names in the first cells of the page's two tables."""
    tree = ast.parse((ROOT / "clients" / "bench" / "labmon_bench" / "settings.py").read_text())
    asked = {node.args[0].value for node in ast.walk(tree)
             if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute) and isinstance(node.func.value, ast.Name)
             and node.func.value.id == "section" and node.func.attr in {"text", "number", "parsed", "is_on", "one_of", "pairs"}}
    tables = PAGE[PAGE.index("## Every setting"):PAGE.index("## What happens when")]
    assert set(re.findall(r"^\| `(\w+)` \|", tables, re.MULTILINE)) == asked


def test_every_error_of_the_page_is_one_of_the_clients():
    """The fixed words of each quoted message stand in the code, whatever is put between them."""
    table = PAGE[PAGE.index("## Every error"):PAGE.index("## Figures")]
    plain = re.sub(r'"\s*\n\s*f?"', "", SOURCE)
    said = [words for row in re.findall(r"^\| (`.*?`) \|", table, re.MULTILINE) for words in re.findall(r"`([^`]*)`", row)]
    assert len(said) > 20
    for words in said:
        for part in (part.strip(" ()") for part in re.split(r"…|\d+ ", words)):
            assert part in plain, part
