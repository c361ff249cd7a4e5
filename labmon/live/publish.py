"""To the open browsers, after the commit: what changed, never the values."""

import asyncio
import logging
from typing import Any

from asgiref.sync import async_to_sync
from channels.layers import get_channel_layer
from django.db import transaction
from redis.exceptions import RedisError

LAB_GROUP = "lab"
#: A write, or the judging of readings, waits no longer than this for a broker that is away or hangs.
PATIENCE_S = 1.0
log = logging.getLogger(__name__)


def publish(change: dict[str, Any]) -> None:
    """Tell the browsers once the transaction is committed; a dead broker costs the hint, never the write.

    ``change`` is ``{"kind": "tap" | "alarm" | "limits" | "stations" | ..., "ids": [...]}``: pages ask for the truth by HTTP.
    """
    transaction.on_commit(lambda: _send(change), robust=True)


def _send(change: dict[str, Any]) -> None:
    layer = get_channel_layer()
    if layer is None:
        return
    try:
        async_to_sync(_send_in_time)(layer, {"type": "lab.changed", "change": change})
    except (OSError, RedisError) as fault:
        log.warning("publish_failed", extra={"kind": change.get("kind"), "fault": repr(fault)})


async def _send_in_time(layer: Any, message: dict[str, Any]) -> None:
    async with asyncio.timeout(PATIENCE_S):
        await layer.group_send(LAB_GROUP, message)
