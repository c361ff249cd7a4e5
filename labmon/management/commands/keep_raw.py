"""``manage.py keep_raw``: how long raw readings are kept at least."""

from argparse import ArgumentParser
from typing import Any

from django.core.management.base import CommandError

from ingest.models import Tap
from labmon.benches.keeping import end_keep_rule, rule_text, set_keep_rule
from labmon.errors import WriteError
from labmon.management.base import LabCommand

WORDS = {"for-ever": None}


class Command(LabCommand):
    help = "Say how long raw readings of a tap, or of the lab, are kept at least. Rollups are always kept for ever."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("whose", metavar="STATION/TAP|lab", help="a tap, or lab: every tap without a rule of its own")
        parser.add_argument("days", metavar="DAYS|for-ever|as-the-lab", help="whole days; as-the-lab ends a tap's own rule")
        parser.add_argument("--reason", default="", help="goes into the audit")

    def handle(self, *args: Any, **options: Any) -> str:
        tap = None if options["whose"] == "lab" else _tap(options["whose"])
        if options["days"] == "as-the-lab":
            if tap is None:
                raise CommandError("The lab's rule is a number of days, or for-ever.")
            end_keep_rule(tap, by=None, reason=options["reason"])
            return f"{options['whose']} follows the lab's rule."
        try:
            rule = set_keep_rule(tap, _days(options["days"]), by=None, reason=options["reason"])
        except WriteError as error:
            raise CommandError(f"{error.why} {error.do}") from error
        return f"Now {rule_text(rule)}. Days past it are deleted at night, each with a row in the audit."


def _tap(text: str) -> Tap:
    station, _, name = text.partition("/")
    try:
        return Tap.objects.select_related("station").get(station__name=station, name=name)
    except Tap.DoesNotExist:
        raise CommandError(f"There is no tap {text}. Write STATION/TAP, or lab.") from None


def _days(text: str) -> int | None:
    if text in WORDS:
        return WORDS[text]
    if not text.isdecimal():
        raise CommandError(f"{text}: write a number of days, or for-ever.")
    return int(text)
