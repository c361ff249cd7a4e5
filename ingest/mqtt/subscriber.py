"""The station door over MQTT: takes messages from a broker, acknowledges each to the broker only after its commit.

The broker's own acknowledgement to a station says nothing of storage (a broker can lose what it took), so each message is
answered on the station's answer topic, with the body that the HTTP door gives; a station forgets readings on that only.
"""

import asyncio
import logging
import socket
import threading
from collections import deque
from dataclasses import dataclass
from typing import Any

import msgspec
from paho.mqtt.client import CallbackAPIVersion, Client, MQTTMessage, MQTTv5
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties

from ingest.door.asgi import Door
from ingest.door.keys import NameRing
from ingest.door.notices import note_refused
from ingest.door.refusal import Refusal
from ingest.mqtt.address import BrokerAddress
from ingest.mqtt.broker_log import NOTICES, TURNED_AWAY, BrokerLog
from ingest.mqtt.links import note_link_lost
from ingest.mqtt.topics import ANSWER, GONE, READINGS, SHARED, station_of, topic_of

log = logging.getLogger(__name__)

MOST_UNANSWERED = 200
"""Messages taken and not yet acknowledged; the broker may allow fewer (mosquitto: max_inflight_messages, 20 unless told)."""
MOST_UNANSWERED_BYTES = 64 << 20
"""Beyond these the connection is not read; one message more is let in."""
SESSION_KEPT_S = 300
"""So long the broker keeps messages for a subscriber that is away; afterwards stations repeat what was not answered."""
KEEP_ALIVE_S = 15
FIRST_PAUSE_S, LONGEST_PAUSE_S = 0.25, 5.0
_STOP_WITHIN_S = 5.0
_PASSING = frozenset({429, 503})


@dataclass(frozen=True, slots=True)
class _Taken:
    """A message on its way through the door."""

    message: MQTTMessage
    life: int
    """The connection it came over: a number of an older one means nothing to the broker."""
    answered: asyncio.Task[bytes]


class Subscriber:
    """One subscriber; several, each with its own ``client_id``, divide the load.

    Args:
        address: The broker.
        client_id: Names its session at the broker: the same after a restart, so that what was not acknowledged comes again.
    """

    def __init__(self, address: BrokerAddress, client_id: str) -> None:
        self.address = address
        self.door = Door(NameRing(), has_presence=False)
        self._unanswered: deque[_Taken] = deque()
        self._bytes, self._room = 0, threading.Condition()
        self._life, self._is_stopping = 0, False
        self._came = asyncio.Event()
        self._broker_log, self._notices_mid = BrokerLog(), None
        self._client = Client(CallbackAPIVersion.VERSION2, client_id, protocol=MQTTv5, manual_ack=True)
        self._client.username_pw_set(address.user, address.password)
        if address.is_tls:
            self._client.tls_set()
        self._client.reconnect_delay_set(1, 10)
        self._client.on_connect, self._client.on_disconnect = self._on_connect, self._on_disconnect
        self._client.on_subscribe, self._client.on_message = self._on_subscribe, self._on_message
        self._client.on_socket_open = _send_at_once

    async def run(self, stop: asyncio.Event) -> None:
        """Until ``stop``; then finish what was taken, and leave the rest to the session."""
        self._loop = asyncio.get_running_loop()
        session = Properties(PacketTypes.CONNECT)
        session.SessionExpiryInterval, session.ReceiveMaximum = SESSION_KEPT_S, MOST_UNANSWERED
        self._client.connect_async(self.address.host, self.address.port, KEEP_ALIVE_S, clean_start=False, properties=session)
        self._client.loop_start()
        acknowledging = asyncio.create_task(self._acknowledge())
        await stop.wait()
        with self._room:
            self._is_stopping = True
            self._room.notify_all()
        await asyncio.wait([taken.answered for taken in self._unanswered] or [asyncio.create_task(asyncio.sleep(0))],
                           timeout=_STOP_WITHIN_S)
        await asyncio.sleep(0.05)  # the last acknowledgements go out
        self._client.disconnect()
        await asyncio.to_thread(self._client.loop_stop)
        acknowledging.cancel()
        for taken in self._unanswered:
            taken.answered.cancel()
        await asyncio.gather(acknowledging, *(taken.answered for taken in self._unanswered), return_exceptions=True)
        await self.door.close()

    def _on_connect(self, client: Client, _: Any, flags: Any, reason: Any, properties: Any) -> None:
        if reason.is_failure:
            log.warning("broker_refuses", extra={"reason": str(reason)})
            return
        self._life += 1
        log.info("broker_connected", extra={"host": self.address.host, "is_session_kept": flags.session_present})
        client.subscribe([(SHARED + READINGS, 1), (SHARED + GONE, 0)])
        _, self._notices_mid = client.subscribe(NOTICES, 0)

    def _on_subscribe(self, client: Client, _: Any, mid: int, reasons: list[Any], properties: Any) -> None:
        if mid == self._notices_mid:  # the broker's log is a hint: it may keep it to itself
            return
        if any(reason.is_failure for reason in reasons):
            log.error("broker_refuses_subscription", extra={"reasons": ", ".join(map(str, reasons))})
        else:
            log.info("broker_subscribed")

    def _on_disconnect(self, client: Client, _: Any, flags: Any, reason: Any, properties: Any) -> None:
        log.info("broker_disconnected", extra={"reason": str(reason)})

    def _on_message(self, client: Client, _: Any, message: MQTTMessage) -> None:
        """In the client's thread, which waits here while too much is unanswered."""
        if message.topic == NOTICES:
            self._note_turned_away(message)
            return
        with self._room:
            self._room.wait_for(lambda: self._bytes <= MOST_UNANSWERED_BYTES or self._is_stopping)
            if self._is_stopping:
                return
            self._bytes += len(message.payload)
        self._loop.call_soon_threadsafe(self._take, message, self._life)

    def _note_turned_away(self, message: MQTTMessage) -> None:
        """A wrong key or name at the broker, for the joining slip."""
        address = self._broker_log.turned_away(message.payload.decode("utf-8", "replace"))
        if address is not None and not message.retain:
            note_refused("", address, TURNED_AWAY)
        self._client.ack(message.mid, message.qos)

    def _take(self, message: MQTTMessage, life: int) -> None:
        self._unanswered.append(_Taken(message, life, asyncio.create_task(self._answer(message))))
        self._came.set()

    async def _answer(self, message: MQTTMessage) -> bytes:
        """Pass a message through the door until it is taken or refused; gives the answer, empty where there is none."""
        station = station_of(message.topic)
        if message.topic == topic_of(GONE, station):
            await asyncio.to_thread(note_link_lost, station)  # a hint for people; silence is judged by readings alone
            return b""
        pause_s = FIRST_PAUSE_S
        while (answer := await self._through_door(message.payload, station)) is None:
            await asyncio.sleep(pause_s)
            pause_s = min(2 * pause_s, LONGEST_PAUSE_S)
        return msgspec.json.encode(answer)

    async def _through_door(self, payload: bytes, station: str) -> dict[str, Any] | None:
        """The answer; None where it is worth trying again."""
        try:
            return await self.door.take(payload, None, station)
        except Refusal as refusal:
            if refusal.status in _PASSING:
                return None
            try:
                if refusal.status != 401:
                    await self.door.keep_message(payload, station, refusal)
            except Refusal as later:
                if later.status in _PASSING:
                    return None
            return refusal.as_json()

    async def _acknowledge(self) -> None:
        """To the station, then to the broker: both in the order in which messages came (MQTT 5.0, section 4.6)."""
        while True:
            while not self._unanswered:
                self._came.clear()
                await self._came.wait()
            taken = self._unanswered[0]
            await asyncio.wait([taken.answered])
            self._unanswered.popleft()
            with self._room:
                self._bytes -= len(taken.message.payload)
                self._room.notify()
            if taken.answered.cancelled():
                continue
            if fault := taken.answered.exception():
                log.error("message_not_taken", exc_info=fault, extra={"topic": taken.message.topic})
                continue
            if answer := taken.answered.result():
                self._publish(taken.message, answer)
            if taken.life == self._life:
                self._client.ack(taken.message.mid, taken.message.qos)

    def _publish(self, message: MQTTMessage, answer: bytes) -> None:
        about: Properties | None = None
        if mark := getattr(message.properties, "CorrelationData", None):
            about = Properties(PacketTypes.PUBLISH)
            about.CorrelationData = mark
        self._client.publish(topic_of(ANSWER, station_of(message.topic)), answer, qos=0, properties=about)


def _send_at_once(client: Client, _: Any, wire: socket.socket) -> None:
    """Without Nagle's delay (RFC 896): an answer would wait up to 40 ms for the acknowledgement of the one before."""
    wire.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
