"""``manage.py run_mqtt [--name NAME]``: one subscriber at the MQTT broker; several, each with its own name, share the load."""

import asyncio
import socket
from argparse import ArgumentParser
from typing import Any

from django.conf import settings
from django.core.management.base import CommandError

from ingest.door.notices import listen
from ingest.mqtt.running import run_subscriber
from labmon.benches.door_log import keep_notices_in_thread
from labmon.management.base import LabCommand


class Command(LabCommand):
    help = "Takes readings from the MQTT broker of LABMON_MQTT_URL until stopped. run_lab starts one by itself."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("--name", default=socket.gethostname(), metavar="NAME",
                            help="its session's name at the broker: another for each subscriber, the same after a restart")

    def handle(self, *args: Any, **wish: Any) -> None:
        if settings.MQTT_BROKER is None:
            raise CommandError("No MQTT broker is named. Set LABMON_MQTT_URL (docs/operations.md, 'MQTT').")
        listen(keep_notices_in_thread)
        client_id = f"labmon-{wish['name']}"
        asyncio.run(run_subscriber(settings.MQTT_BROKER, client_id, settings.MQTT_ACCESS_DIR, settings.MQTT_PID_FILE))
