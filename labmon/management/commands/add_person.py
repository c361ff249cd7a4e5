"""``manage.py add_person``: an account with its role, and a key for the API, shown once."""

import getpass
import json
import sys
from argparse import ArgumentParser
from typing import Any

from django.core.management.base import CommandError
from django.db import transaction

from ingest.models import Station
from labmon.api.times import parse_time
from labmon.errors import WriteError
from labmon.management.base import LabCommand
from labmon.people.actions import add_person
from labmon.people.keys import make_person_key
from labmon.people.models import Role


class Command(LabCommand):
    help = "Add a person; prints one JSON line with a key for the API, which is shown this once."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("name", metavar="NAME")
        parser.add_argument("--role", required=True, choices=Role.values)
        parser.add_argument("--email", default="")
        parser.add_argument("--ask-password", action="store_true",
                            help="also set a password for signing in; asked for, or read from standard input")
        parser.add_argument("--station", action="append", default=[], metavar="STATION",
                            help="a bench that a guest sees; may repeat")
        parser.add_argument("--until", metavar="TIME", help="when a guest's access ends, such as 2031-03-04T00:00:00Z")

    def handle(self, *args: Any, **wish: Any) -> str:
        try:
            until = parse_time(wish["until"]) if wish["until"] else None
        except ValueError as error:
            raise CommandError(f"--until: {error}.") from error
        stations = [_station_named(name) for name in wish["station"]]
        password = _asked_password() if wish["ask_password"] else None
        try:
            with transaction.atomic():
                person = add_person(wish["name"], wish["role"], password=password, email=wish["email"], guest_until=until,
                                    guest_stations=stations)
                _row, key = make_person_key(person, by=None)
        except WriteError as error:
            raise CommandError(f"{error.why} {error.do}") from error
        return json.dumps({"person": person.username, "key": key})


def _asked_password() -> str:
    return getpass.getpass("Password: ") if sys.stdin.isatty() else sys.stdin.readline().rstrip("\n")


def _station_named(name: str) -> Station:
    try:
        return Station.objects.get(name=name)
    except Station.DoesNotExist:
        raise CommandError(f"There is no station called {name}. Add it with manage.py add_station.") from None
