"""Health: the process alone, and what it needs."""

import pytest

from labmon.api import health
from tests.labmon.api.conftest import Caller

SERVICES = "/health/services"


def test_the_process_is_up_without_asking_anything(django_assert_num_queries, db):
    with django_assert_num_queries(0):
        answer = Caller().get("/health/process")
    assert answer.status_code == 200 and answer.json() == {"process": "up"}


def test_all_services_are_up(db):
    answer = Caller().get(SERVICES)
    assert answer.status_code == 200 and answer.json()["missing"] == []


def test_a_broker_that_is_away_is_named(db, settings):
    settings.CHANNEL_LAYERS = {"default": {"CONFIG": {"hosts": ["redis://127.0.0.1:9/0"]}}}
    answer = Caller().get(SERVICES)
    assert answer.status_code == 503 and answer.json()["missing"] == ["broker"]
    assert "LABMON_BROKER_URL" in answer.json()["detail"] and answer.headers["Retry-After"]


def test_a_database_that_is_away_is_named(db, monkeypatch):
    monkeypatch.setattr(health, "conninfo_of", lambda _database: {"host": "127.0.0.1", "port": 9})
    assert Caller().get(SERVICES).json()["missing"] == ["database"]


def test_a_migration_that_is_not_applied_is_named(db, monkeypatch):
    on_disk = health._migrations_on_disk() | {("labmon", "9999_not_yet")}
    monkeypatch.setattr(health, "_migrations_on_disk", lambda: on_disk)
    assert Caller().get(SERVICES).json()["missing"] == ["migrations"]


@pytest.mark.parametrize("address", ["/health/process", SERVICES])
def test_only_get_is_answered(db, address):
    assert Caller().client.post(address).status_code == 405
