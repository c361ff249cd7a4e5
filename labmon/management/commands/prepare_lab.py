"""``manage.py prepare_lab``: migrate, collect static files, make the first login; the last line is JSON."""

import json
from argparse import ArgumentParser
from typing import Any

from labmon.engines import prepare
from labmon.management.base import LabCommand


class Command(LabCommand):
    help = "Makes a lab usable: tables, static files, a first login. Safe to run again; run_lab does it by itself."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("--static", action="store_true", help="collect static files only; needs no database")
        parser.add_argument("--demo", action="store_true", help="fill it with the invented laboratory")

    def execute(self, *args: Any, **options: Any) -> str | None:
        """The static files can be collected while an image is built, where no database is."""
        self.needs_database = not options["static"]
        return super().execute(*args, **options)

    def handle(self, *args: Any, **options: Any) -> None:
        if options["static"]:
            prepare.collect_static(self._say)
            return
        prepare.tell_checks(self._say)
        prepare.migrate(self._say)
        prepare.collect_static(self._say)
        login = self._demo() if options["demo"] else prepare.first_login()
        self.stdout.write(json.dumps({"prepared": {"login": login}}))

    def _demo(self) -> list[str]:
        from labmon.demo.build import build_demo_lab

        return build_demo_lab(self._say).lines

    def _say(self, text: str) -> None:
        self.stdout.write(text)
        self.stdout.flush()
