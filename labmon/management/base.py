"""The base of labmon's own commands."""

from argparse import ArgumentParser
from typing import Any

from django.conf import settings
from django.core.management.base import BaseCommand, CommandError
from django.db import OperationalError, connection


class LabCommand(BaseCommand):
    """A command that works on a running lab; where there is none it says so in one line."""

    requires_system_checks: list[str] = []
    needs_database = True

    def add_arguments(self, parser: ArgumentParser) -> None:
        """``--data`` is taken by manage.py before the settings are read; it stands here for the help text."""
        parser.add_argument("--data", metavar="DIR", help="the lab's data folder (LABMON_DATA; default lab-data)")

    def execute(self, *args: Any, **options: Any) -> str | None:
        """Check that the services answer, then run."""
        if self.needs_database:
            check_database()
        return super().execute(*args, **options)


def check_database() -> None:
    """Raise CommandError with a remedy where no database is known or it does not answer."""
    remedy = ("Start the lab (manage.py run_lab), name its folder (--data DIR or LABMON_DATA), "
              "or set LABMON_DATABASE_URL and LABMON_BROKER_URL.")
    if not settings.HAS_SERVICES:
        raise CommandError(f"No lab is running on {settings.DATA_DIR}. {remedy}")
    try:
        connection.ensure_connection()
    except OperationalError as error:
        first_line = str(error).strip().splitlines()[0]
        raise CommandError(f"The lab's database does not answer ({first_line}). {remedy}") from error
