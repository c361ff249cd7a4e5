"""Is the process up, and does it reach what it needs?"""

import functools
from typing import Any

import psycopg
import redis
from django.conf import settings
from django.db import connection
from django.db.migrations.loader import MigrationLoader
from django.http import HttpRequest, HttpResponse

from ingest.database import conninfo_of
from labmon.api.answer import json_answer
from labmon.api.problem import Problem

PATIENCE_S = 2


def get_process(request: HttpRequest) -> HttpResponse:
    """The process answers: nothing else is asked."""
    return json_answer({"process": "up"})


def get_services(request: HttpRequest) -> HttpResponse:
    """200 when database, broker and migrations are well, else 503 naming what is missing."""
    missing = missing_services()
    if missing:
        raise Problem(503, f"Missing: {', '.join(missing)}.", " ".join(REMEDIES[name] for name in missing),
                      more={"missing": missing})
    return json_answer({"database": "up", "broker": "up", "migrations": "applied", "missing": []})


REMEDIES = {
    "database": "Start the database or correct LABMON_DATABASE_URL.",
    "migrations": "Run manage.py migrate.",
    "broker": "Start the broker or correct LABMON_BROKER_URL.",
}


def missing_services() -> list[str]:
    """Which of database, migrations and broker are missing; each is given two seconds."""
    return _missing_in_database() + ([] if _is_broker_up() else ["broker"])


def _missing_in_database() -> list[str]:
    wish: dict[str, Any] = conninfo_of(connection.settings_dict) | {"connect_timeout": PATIENCE_S}
    try:
        with psycopg.connect(**wish, autocommit=True) as link:
            rows = link.execute("SELECT app, name FROM django_migrations").fetchall()
    except psycopg.errors.UndefinedTable:
        return ["migrations"]
    except psycopg.Error:
        return ["database"]
    return [] if _migrations_on_disk() <= set(rows) else ["migrations"]


@functools.cache
def _migrations_on_disk() -> frozenset[tuple[str, str]]:
    return frozenset(MigrationLoader(None).disk_migrations)


def _is_broker_up() -> bool:
    address = settings.CHANNEL_LAYERS["default"]["CONFIG"]["hosts"][0]
    try:
        with redis.Redis.from_url(address, socket_connect_timeout=PATIENCE_S, socket_timeout=PATIENCE_S) as link:
            return bool(link.ping())
    except (redis.RedisError, OSError):
        return False
