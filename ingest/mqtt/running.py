"""Runs a subscriber until SIGTERM or SIGINT, and keeps the broker's password and rules files meanwhile."""

import asyncio
import gc
import logging
import signal
from pathlib import Path

from django.db import Error, connection

from ingest.mqtt.access import write_access
from ingest.mqtt.address import BrokerAddress
from ingest.mqtt.probe import lets_anybody_in
from ingest.mqtt.subscriber import Subscriber

log = logging.getLogger(__name__)

ACCESS_EVERY_S = 2.0


async def run_subscriber(address: BrokerAddress, client_id: str, access_folder: Path | None,
                         broker_pid_file: Path | None) -> None:
    """Until a signal comes."""
    gc.collect()
    gc.freeze()  # as the door does: what is loaded by now stays, and need not be looked through at each commit
    stop = asyncio.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        asyncio.get_running_loop().add_signal_handler(number, stop.set)
    if await asyncio.to_thread(lets_anybody_in, address):
        log.warning("broker_lets_anybody_in", extra={"host": address.host})
    keeping = asyncio.create_task(_keep_access(access_folder, address, broker_pid_file)) if access_folder else None
    await Subscriber(address, client_id).run(stop)
    if keeping is not None:
        keeping.cancel()


async def _keep_access(folder: Path, address: BrokerAddress, broker_pid_file: Path | None) -> None:
    while True:
        await asyncio.to_thread(_write_access_once, folder, address, broker_pid_file)
        await asyncio.sleep(ACCESS_EVERY_S)


def _write_access_once(folder: Path, address: BrokerAddress, broker_pid_file: Path | None) -> None:
    try:
        write_access(folder, address, broker_pid_file)
    except (Error, OSError) as error:
        log.warning("broker_access_not_written", extra={"folder": str(folder), "error": str(error)[:200]})
    finally:
        connection.close()
