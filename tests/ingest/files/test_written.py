import tomllib

import pytest

from ingest.files.mapping import mapping_of
from ingest.files.written import toml_of


@pytest.mark.parametrize("name", ['P "A"', "back\\slash", "tab\tname", "°C", "line\x07bell", "\x7f"])
def test_any_column_name_comes_back(name):
    rules = {"time": {"column": "t", "zone": "UTC"}, "columns": {"port2": {"column": name, "factor": 1e-7}}}
    mapping = mapping_of(rules, kind="dark-port", unit="mW")
    assert mapping_of(tomllib.loads(toml_of(mapping)), kind="dark-port", unit="mW") == mapping
