"""``manage.py send_demo_readings --to ADDRESS``: the invented laboratory's stations send through the real door."""

import signal
import threading
from argparse import ArgumentParser
from typing import Any

from django.core.management.base import CommandError

from labmon.demo.folder import read_notes
from labmon.demo.live import run_live
from labmon.management.base import LabCommand


class Command(LabCommand):
    help = "Sends the invented laboratory's live readings until stopped; the lab must have been built with --demo."
    needs_database = False

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("--to", metavar="ADDRESS", default="http://127.0.0.1:8000/", help="the lab's web address")

    def handle(self, *args: Any, **options: Any) -> None:
        notes = read_notes()
        if notes is None or not notes.is_built:
            raise CommandError("There is no demo laboratory in this data folder. Start it with: manage.py run_lab --demo")
        stop = threading.Event()
        for number in (signal.SIGTERM, signal.SIGINT):
            signal.signal(number, lambda *_: stop.set())
        run_live(notes, options["to"], stop, self._say)
        self._say("stopped")

    def _say(self, text: str) -> None:
        self.stdout.write(text)
        self.stdout.flush()
