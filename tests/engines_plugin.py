"""One embedded PostgreSQL and one Valkey for the whole test session, up before Django reads its settings.

Loaded by ``-p`` in pyproject.toml. With xdist the controller starts them and the workers inherit their addresses.
LABMON_TEST_DATABASE_URL and LABMON_TEST_BROKER_URL name given servers instead.
Speed: the session's database may lose everything in a power cut (fsync off), and only this one; tests that kill
servers start their own.
"""

import atexit
import os
import shutil
import tempfile
import time
from pathlib import Path

import pytest

OWNER = "LABMON_TEST_ENGINES_OF"
THROW_AWAY = {"fsync": "off", "synchronous_commit": "off", "full_page_writes": "off", "max_connections": "100",
              "shared_buffers": "64MB", "autovacuum": "off"}


class SessionEngines:
    """The session's servers in a short temporary folder."""

    def __init__(self) -> None:
        from labmon.engines.folder import DataFolder

        self.folder = DataFolder(Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp")))
        self.running: list = []
        atexit.register(self.stop)

    def start(self) -> None:
        """Start what is not given, and name the addresses in the environment."""
        from labmon.engines.postgres import EmbeddedPostgres
        from labmon.engines.valkey import EmbeddedValkey

        self.folder.make()
        given_database = os.environ.get("LABMON_TEST_DATABASE_URL")
        given_broker = os.environ.get("LABMON_TEST_BROKER_URL")
        os.environ["LABMON_DATABASE_URL"] = given_database or self._run(EmbeddedPostgres(self.folder, THROW_AWAY))
        os.environ["LABMON_BROKER_URL"] = given_broker or self._run(EmbeddedValkey(self.folder, is_kept=False))
        os.environ[OWNER] = str(os.getpid())

    def _run(self, engine) -> str:
        self.running.append(engine)
        engine.start()
        return engine.url

    def stop(self) -> None:
        """Stop them and remove the folder; a second call finds nothing to do."""
        while self.running:
            self.running.pop().stop()
        shutil.rmtree(self.folder.path, ignore_errors=True)


def _clean_environment() -> None:
    """Tests do not depend on the shell they are started from."""
    for name in list(os.environ):
        if name.startswith("LABMON_") and name not in {"LABMON_REALDATA", OWNER} and "LABMON_TEST_" not in name:
            del os.environ[name]
    os.environ["TZ"] = "UTC"
    time.tzset()


def _begin() -> None:
    worker = os.environ.get("PYTEST_XDIST_WORKER", "")
    if not (worker and OWNER in os.environ):
        _clean_environment()
        engines = SessionEngines()
        engines.start()
        os.environ["LABMON_TEST_FOLDER"] = str(engines.folder.path)
    folder = Path(os.environ["LABMON_TEST_FOLDER"]) / f"data{worker}"
    (folder / "static").mkdir(parents=True, exist_ok=True)      # WhiteNoise warns where there is none
    os.environ["LABMON_DATA"] = str(folder)
    os.environ["LABMON_BROKER_PREFIX"] = f"labmon-test{worker}"


_begin()


@pytest.hookimpl
def pytest_report_header() -> str:
    """Say which servers serve."""
    return f"database: {os.environ['LABMON_DATABASE_URL']}\nbroker: {os.environ['LABMON_BROKER_URL']}"
