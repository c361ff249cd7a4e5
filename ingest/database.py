"""Plain psycopg connections: Django's own one, and separate ones for what must not share a transaction with it."""

import struct
from collections.abc import Sequence
from typing import Any, LiteralString

import numpy as np
import psycopg
from django.conf import settings
from django.db import connection
from psycopg.adapt import Dumper

from ingest.conninfo import conninfo_of

PATIENCE = {"connect_timeout": 3, "application_name": "labmon",
            "options": "-c statement_timeout=30000 -c lock_timeout=10000 -c idle_in_transaction_session_timeout=60000"}


def connect(*, autocommit: bool = True) -> psycopg.Connection[Any]:
    """A connection of one's own, with bounded waiting."""
    return psycopg.connect(**(PATIENCE | conninfo_of(settings.DATABASES["default"])), autocommit=autocommit)


def shared() -> psycopg.Connection[Any]:
    """The psycopg connection below Django's, within its transaction if there is one."""
    connection.ensure_connection()
    return connection.connection


class BigInts(list[int]):
    """Whole numbers, none of them null, to be sent as bigint[] in one go."""


class _BigIntsDumper(Dumper):
    """The binary form of bigint[]: its head, then each number with its length before it."""

    format = psycopg.pq.Format.BINARY
    oid = psycopg.adapters.types["int8"].array_oid

    def dump(self, obj: BigInts) -> bytes:
        """PostgreSQL's binary form."""
        body = np.empty(len(obj), _NUMBER)
        body["size"], body["number"] = 8, obj
        return _HEAD.pack(1, 0, psycopg.adapters.types["int8"].oid, len(obj), 1) + body.tobytes()


_NUMBER = np.dtype([("size", ">i4"), ("number", ">i8")])
_HEAD = struct.Struct("!iiIii")


def columns_of(rows: Sequence[tuple[Any, ...]]) -> list[list[Any]]:
    """Rows as columns, as unnest() wants them."""
    columns = [list(column) for column in zip(*rows, strict=True)]
    return [BigInts(column) if set(map(type, column)) == {int} else column for column in columns]


def fetch(db: psycopg.Connection[Any], sql: LiteralString, *parameters: Any) -> list[tuple[Any, ...]]:
    """All rows, sent in binary: bytes cost no text form."""
    return psycopg.Cursor(db).execute(sql, parameters, binary=True).fetchall()


psycopg.adapters.register_dumper(BigInts, _BigIntsDumper)
