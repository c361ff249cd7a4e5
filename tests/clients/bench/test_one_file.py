"""The one file is the package, needs Python 3.9 and nothing else, and knows nothing of the server."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

from tests.clients.bench.conftest import ONE_FILE, ROOT

BENCH = ROOT / "clients" / "bench"
MODULES = sorted((BENCH / "labmon_bench").glob("*.py"))
OPTIONAL = {"pyvisa", "serial"}


def test_it_is_made_from_the_package_as_it_is():
    made = subprocess.run([sys.executable, "-c", "import make_one_file as m; print(m.one_file(), end='')"], cwd=BENCH, text=True,
                          capture_output=True, check=True, encoding="utf-8")
    assert ONE_FILE.read_text(encoding="utf-8") == made.stdout, "run: python clients/bench/make_one_file.py"


@pytest.mark.parametrize("file", [*MODULES, ONE_FILE], ids=lambda file: file.name)
def test_it_needs_python_3_9_only(file):
    ast.parse(file.read_text(encoding="utf-8"), feature_version=(3, 9))
    vermin = Path(sys.executable).with_name("vermin")
    done = subprocess.run([vermin, "--target=3.9-", "--no-tips", "--violations", file], capture_output=True, text=True)
    assert done.returncode == 0, done.stdout


@pytest.mark.parametrize("file", [*MODULES, ONE_FILE], ids=lambda file: file.name)
def test_it_imports_the_standard_library_only(file):
    tree = ast.parse(file.read_text(encoding="utf-8"))
    functions = [part for part in ast.walk(tree) if isinstance(part, ast.FunctionDef)]
    inner = {id(node) for function in functions for node in ast.walk(function)}
    for node in ast.walk(tree):
        names = ([alias.name for alias in node.names] if isinstance(node, ast.Import)
                 else [node.module] if isinstance(node, ast.ImportFrom) else [])
        for name in names:
            package = name.split(".")[0]
            ours = package == "labmon_bench" and file is not ONE_FILE
            assert package in sys.stdlib_module_names or ours or (package in OPTIONAL and id(node) in inner), name


def test_it_runs_where_nothing_else_is(tmp_path):
    """Isolated, without site packages, from another folder."""
    copied = tmp_path / "labmon_bench.py"
    copied.write_bytes(ONE_FILE.read_bytes())
    def run(*words):
        return subprocess.run([sys.executable, "-I", "-S", copied, *words], capture_output=True, text=True, cwd=tmp_path)

    (tmp_path / "bench.ini").write_text(run("example").stdout)
    done = run("check", "bench.ini")
    assert done.returncode == 1 and "ok 1. settings: 1 taps: eom-in" in done.stdout and "PyVISA is not installed" in done.stdout
