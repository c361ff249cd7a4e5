"""``manage.py add_station``: a station with its taps, and its key, shown once."""

import json
from argparse import ArgumentParser
from typing import Any

from django.core.management.base import CommandError

from ingest.models import TapKind, Unit
from labmon.benches.actions import TapWish, add_bench
from labmon.errors import WriteError
from labmon.management.base import LabCommand
from labmon.people.models import Person


class Command(LabCommand):
    help = "Add a station with its taps; prints one JSON line with its key, which is shown this once."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("name", metavar="NAME", help="short name: small letters, digits and '-'")
        for kind in (TapKind.TWO_PORT, TapKind.DARK_PORT, TapKind.STOKES):
            parser.add_argument(f"--{kind}", action="append", default=[], metavar="TAP=UNIT", help=f"a {kind} tap; may repeat")
        parser.add_argument("--climate", action="append", default=[], metavar="TAP", help="a climate tap; may repeat")
        parser.add_argument("--room", action="append", default=[], metavar="ROOM", help="the room it stands in")
        parser.add_argument("--interval-s", action="append", default=[], metavar="TAP=SECONDS",
                            help="declared time between a tap's readings; may repeat")
        parser.add_argument("--float32", action="append", default=[], metavar="TAP",
                            help="its source measures in float32: half the room on disk, nothing lost; may repeat")
        parser.add_argument("--owner", default="", metavar="PERSON", help="whose bench it is")
        parser.add_argument("--purpose", default="", help="what the bench is for")

    def handle(self, *args: Any, **wish: Any) -> str:
        rooms = set(wish["room"])
        if len(rooms) > 1:
            raise CommandError(f"A station stands in one room, not in {len(rooms)}. Give --room once.")
        try:
            station, key = add_bench(wish["name"], taps=taps_wished(wish), room="".join(rooms),
                                     owner=person_named(wish["owner"]), purpose=wish["purpose"])
        except WriteError as error:
            raise CommandError(f"{error.why} {error.do}") from error
        return json.dumps({"station": station.name, "key": key})


def taps_wished(wish: dict[str, Any]) -> list[TapWish]:
    """The taps of the command line."""
    intervals_s = {tap: _seconds(tap, text) for tap, text in (_pair(pair, "--interval-s") for pair in wish["interval_s"])}
    named = [(tap, kind, unit) for kind, option in ((TapKind.TWO_PORT, "two_port"), (TapKind.DARK_PORT, "dark_port"),
                                                    (TapKind.STOKES, "stokes"))
             for tap, unit in (_pair(pair, f"--{kind}") for pair in wish[option])]
    named += [(tap, TapKind.CLIMATE, "") for tap in wish["climate"]]
    names = [tap for tap, _kind, _unit in named]
    for tap in names:
        if names.count(tap) > 1:
            raise CommandError(f"The tap {tap} is named twice. Give each tap its own name.")
    if unknown := intervals_s.keys() - set(names):
        raise CommandError(f"--interval-s names {', '.join(sorted(unknown))}, which is no tap of this station.")
    if unknown := set(wish["float32"]) - set(names):
        raise CommandError(f"--float32 names {', '.join(sorted(unknown))}, which is no tap of this station.")
    return [TapWish(tap, kind, unit, intervals_s.get(tap), tap in wish["float32"]) for tap, kind, unit in named]


def _pair(text: str, option: str) -> tuple[str, str]:
    tap, is_there, value = text.partition("=")
    if not (is_there and tap and value):
        example = "TAP=SECONDS" if option == "--interval-s" else f"TAP=UNIT with a unit of {', '.join(Unit.values)}"
        raise CommandError(f"{option} {text}: write {example}.")
    return tap, value


def _seconds(tap: str, text: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise CommandError(f"--interval-s {tap}={text}: write a number of seconds.") from None


def person_named(name: str) -> Person | None:
    """The person of that name; None for no name."""
    if not name:
        return None
    try:
        return Person.objects.get(username=name)
    except Person.DoesNotExist:
        raise CommandError(f"There is no person called {name}. Add them with manage.py add_person.") from None
