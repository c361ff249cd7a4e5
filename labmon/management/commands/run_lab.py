"""``manage.py run_lab [--data DIR] [--port N] [--demo]``: the whole lab under one supervising process."""

import os
from argparse import ArgumentParser
from typing import Any

from django.conf import settings
from django.core.management.base import CommandError

from labmon.engines.faults import EngineFault
from labmon.engines.progress import Progress
from labmon.engines.supervise import Supervisor, Wish
from labmon.management.base import LabCommand


class Command(LabCommand):
    help = "Runs the whole lab: database, broker, web, worker and beat. Ctrl-C stops everything."
    needs_database = False

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("--port", type=int, default=settings.PORT, metavar="N", help="port of the web process")
        parser.add_argument("--listen", default=settings.LISTEN, metavar="ADDRESS",
                            help="address to listen on; 0.0.0.0 lets bench stations in (see also LABMON_HOSTS)")
        parser.add_argument("--demo", action="store_true", help="run an invented laboratory with two weeks of history")

    def handle(self, *args: Any, **options: Any) -> None:
        wish = Wish(folder=settings.DATA_DIR, listen=options["listen"], port=options["port"], has_demo=options["demo"],
                    database_url=os.environ.get("LABMON_DATABASE_URL", ""),
                    broker_url=os.environ.get("LABMON_BROKER_URL", ""), has_mqtt=settings.MQTT_BROKER is not None)
        try:
            Supervisor(wish, Progress()).run()
        except EngineFault as fault:
            raise CommandError(str(fault)) from fault
