"""How psycopg reaches the database that Django is set up for."""

from typing import Any


def conninfo_of(database: dict[str, Any]) -> dict[str, Any]:
    """psycopg's keyword arguments for a Django database setting (follows the test database too)."""
    named = {"dbname": database["NAME"], "user": database["USER"], "password": database["PASSWORD"],
             "host": database["HOST"], "port": database["PORT"]}
    plain = {key: value for key, value in database.get("OPTIONS", {}).items() if isinstance(value, (str, int))}
    return {key: value for key, value in named.items() if value} | plain
