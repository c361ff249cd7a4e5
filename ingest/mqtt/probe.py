"""Asks whether the broker lets anybody in: what it passes on under a station's topic is taken as that station's."""

import threading
from typing import Any

from paho.mqtt.client import CallbackAPIVersion, Client, MQTTv5

from ingest.mqtt.address import BrokerAddress


def lets_anybody_in(address: BrokerAddress, within_s: float = 5.0) -> bool:
    """Whether a client without user and password is accepted; False too where the broker does not answer."""
    answered, accepted = threading.Event(), threading.Event()

    def on_connect(client: Client, _: Any, flags: Any, reason: Any, properties: Any) -> None:
        if not reason.is_failure:
            accepted.set()
        answered.set()

    client = Client(CallbackAPIVersion.VERSION2, protocol=MQTTv5, reconnect_on_failure=False)
    client.on_connect = on_connect
    if address.is_tls:
        client.tls_set()
    try:
        client.connect(address.host, address.port)
    except OSError:
        return False
    client.loop_start()
    answered.wait(within_s)
    client.disconnect()
    client.loop_stop()
    return accepted.is_set()
