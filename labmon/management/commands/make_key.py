"""``manage.py make_key``: one more key for a station or a person, shown once."""

import json
from argparse import ArgumentParser
from datetime import datetime
from typing import Any

from django.core.management.base import CommandError

from ingest.models import Station
from labmon.api.times import parse_time
from labmon.benches.actions import make_bench_key
from labmon.management.base import LabCommand
from labmon.people.keys import make_person_key
from labmon.people.models import KeyScope, Person


class Command(LabCommand):
    help = "Make a new key for a station (or a person); prints one JSON line, the key is shown this once."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        whose = parser.add_mutually_exclusive_group(required=True)
        whose.add_argument("station", nargs="?", metavar="STATION")
        whose.add_argument("--person", metavar="NAME")
        parser.add_argument("--expires", metavar="TIME", help="when it ends, such as 2031-03-04T00:00:00Z; else never")

        parser.add_argument("--scope", choices=KeyScope.values, default=KeyScope.WRITE.value,
                            help="what a person's key is good for: read only, or also write (the default)")

    def handle(self, *args: Any, **wish: Any) -> str:
        expires_at = _time(wish["expires"])
        try:
            if wish["person"]:
                row, key = make_person_key(Person.objects.get(username=wish["person"]), by=None, expires_at=expires_at,
                                           scope=wish["scope"])
                return json.dumps({"person": wish["person"], "key": key, "key_id": row.pk})
            row, key = make_bench_key(Station.objects.get(name=wish["station"]), by=None, expires_at=expires_at)
            return json.dumps({"station": wish["station"], "key": key, "key_id": row.pk})
        except (Station.DoesNotExist, Person.DoesNotExist):
            raise CommandError(f"There is no {wish['person'] or wish['station']}. Add it with manage.py add_station, or a "
                               "person with manage.py add_person.") from None


def _time(text: str | None) -> datetime | None:
    try:
        return parse_time(text) if text else None
    except ValueError as error:
        raise CommandError(f"--expires: {error}.") from error
