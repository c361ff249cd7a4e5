"""The distribution alone: it imports without a server or its packages, and needs no newer Python than it says."""

import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

CLIENT = Path(__file__).resolve().parents[3] / "clients" / "notebook"
MODULES = sorted((CLIENT / "labmon_notebook").glob("*.py"))


@pytest.mark.parametrize("file", MODULES, ids=lambda file: file.name)
def test_it_needs_python_3_10_only(file):
    vermin = Path(sys.executable).with_name("vermin")
    done = subprocess.run([vermin, "--target=3.10-", "--no-tips", "--violations", file], capture_output=True, text=True)
    assert done.returncode == 0, done.stdout


def test_it_imports_where_nothing_of_the_server_is(tmp_path):
    """From another folder, with pandas and pyarrow; Django or labmon would betray itself in sys.modules."""
    server = {"django", "labmon", "analysis", "ingest", "requests"}
    program = (f"import sys; sys.path.insert(0, {str(CLIENT)!r}); import labmon_notebook; "
               f"print(sorted({server!r} & set(sys.modules)), labmon_notebook.__all__)")
    done = subprocess.run([sys.executable, "-c", program], cwd=tmp_path, capture_output=True, text=True, check=True)
    assert done.stdout.startswith("[]") and "'Lab'" in done.stdout


def test_its_contracts_hold():
    done = subprocess.run([Path(sys.executable).with_name("lint-imports")], cwd=CLIENT, capture_output=True, text=True)
    assert done.returncode == 0, done.stdout


def test_a_built_distribution_holds_the_package_and_says_what_it_needs():
    said = tomllib.loads((CLIENT / "pyproject.toml").read_text())["project"]
    assert [one.split(">")[0] for one in said["dependencies"]] == ["pandas", "pyarrow"]
    assert {file.name for file in MODULES} >= {"lab.py", "door.py", "calls.py"} and (CLIENT / said["readme"]).is_file()
