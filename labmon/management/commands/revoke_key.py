"""``manage.py revoke_key``: end a key of a station or a person at once."""

import json
from argparse import ArgumentParser
from typing import Any

from django.core.management.base import CommandError

from ingest.models import StationKey
from labmon.benches.actions import revoke_bench_key
from labmon.management.base import LabCommand
from labmon.people.keys import revoke_person_key
from labmon.people.models import PersonKey


class Command(LabCommand):
    help = "End a key of a station (or a person) at once; prints one JSON line."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        whose = parser.add_mutually_exclusive_group(required=True)
        whose.add_argument("station", nargs="?", metavar="STATION")
        whose.add_argument("--person", metavar="NAME")
        which = parser.add_mutually_exclusive_group(required=True)
        which.add_argument("--id", type=int, metavar="N", help="the key_id that make_key printed")
        which.add_argument("--hint", metavar="TEXT", help="the letters of the key that the station page shows")
        which.add_argument("--all", action="store_true", help="every key that is not revoked yet")

    def handle(self, *args: Any, **wish: Any) -> str:
        if wish["person"]:
            keys, revoke = PersonKey.objects.filter(person__username=wish["person"]), revoke_person_key
        else:
            keys, revoke = StationKey.objects.filter(station__name=wish["station"]), revoke_bench_key
        chosen = [key.pk for key in keys.filter(revoked_at=None).order_by("pk") if _is_meant(key, wish)]
        if not chosen:
            raise CommandError(f"{wish['person'] or wish['station']} has no such key in force. Check the name, and the key_id or "
                               "the letters on the station page.")
        for key_id in chosen:
            revoke(key_id, by=None)
        whose = {"person": wish["person"]} if wish["person"] else {"station": wish["station"]}
        return json.dumps(whose | {"revoked": chosen})


def _is_meant(key: StationKey | PersonKey, wish: dict[str, Any]) -> bool:
    if wish["all"]:
        return True
    return key.pk == wish["id"] if wish["id"] is not None else key.hint == wish["hint"]
