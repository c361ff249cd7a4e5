import tomllib
from pathlib import Path

from labmon.software import VERSION


def test_the_version_is_that_of_the_project():
    root = Path(__file__).resolve().parents[2]
    assert tomllib.loads((root / "pyproject.toml").read_text())["project"]["version"] == VERSION
