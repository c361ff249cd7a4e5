"""To the open browsers, after the commit: what changed, never the values."""

import logging
from typing import Any

from asgiref.sync import async_to_sync
from channels.layers import get_channel_layer
from django.db import transaction
from redis.exceptions import RedisError

LAB_GROUP = "lab"
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
        async_to_sync(layer.group_send)(LAB_GROUP, {"type": "lab.changed", "change": change})
    except (OSError, RedisError) as fault:
        log.warning("publish_failed", extra={"kind": change.get("kind"), "fault": str(fault)})
