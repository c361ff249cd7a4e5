"""Plain psycopg connections: Django's own one, and separate ones for what must not share a transaction with it."""

from typing import Any, LiteralString

import psycopg
from django.conf import settings
from django.db import connection

PATIENCE = {"connect_timeout": 3, "application_name": "labmon",
            "options": "-c statement_timeout=30000 -c lock_timeout=10000 -c idle_in_transaction_session_timeout=60000"}


def conninfo_of(database: dict[str, Any]) -> dict[str, Any]:
    """psycopg's keyword arguments for a Django database setting (follows the test database too)."""
    named = {"dbname": database["NAME"], "user": database["USER"], "password": database["PASSWORD"],
             "host": database["HOST"], "port": database["PORT"]}
    plain = {key: value for key, value in database.get("OPTIONS", {}).items() if isinstance(value, (str, int))}
    return {key: value for key, value in named.items() if value} | plain


def connect(*, autocommit: bool = True) -> psycopg.Connection[Any]:
    """A connection of one's own, with bounded waiting."""
    return psycopg.connect(**(PATIENCE | conninfo_of(settings.DATABASES["default"])), autocommit=autocommit)


def shared() -> psycopg.Connection[Any]:
    """The psycopg connection below Django's, within its transaction if there is one."""
    connection.ensure_connection()
    return connection.connection


def fetch(db: psycopg.Connection[Any], sql: LiteralString, *parameters: Any) -> list[tuple[Any, ...]]:
    """All rows, sent in binary: bytes cost no text form."""
    return psycopg.Cursor(db).execute(sql, parameters, binary=True).fetchall()
