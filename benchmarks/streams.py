"""Senders over WebSocket and MQTT: some batches unanswered at a time, latencies from the moment a batch was due."""

import asyncio
import time
from collections import deque
from collections.abc import Iterable, Iterator

import msgspec
import paho.mqtt.client as paho
from websockets.asyncio.client import connect

from benchmarks.sender import Run

WINDOW = 4
"""Unanswered batches of one station."""


class Due:
    """When the next batch of a lane is due: every so often, or at once."""

    def __init__(self, every_s: float | None, phase: float) -> None:
        self.every_s, self.next_s = every_s, time.perf_counter() + phase * (every_s or 0.0)

    async def wait(self) -> float:
        """Wait until it is due; the moment it was."""
        if self.every_s is None:
            return time.perf_counter()
        due_s, self.next_s = self.next_s, self.next_s + self.every_s
        await asyncio.sleep(max(0.0, due_s - time.perf_counter()))
        return due_s


class Lane:
    """One station's batches on their way."""

    def __init__(self, run: Run, readings: int, due: Due) -> None:
        self.run, self.readings, self.due = run, readings, due
        self.waiting: deque[float] = deque()
        self.room = asyncio.Semaphore(WINDOW)

    async def next_batches(self, bodies: Iterable[bytes]):
        """Bodies when they are due and there is room."""
        for body in bodies:
            due_s = await self.due.wait()
            await self.room.acquire()
            self.waiting.append(due_s if self.due.every_s is not None else time.perf_counter())
            yield body

    def take(self, answer: bytes | str) -> None:
        """The oldest batch was answered."""
        self.run.latencies_s.append(time.perf_counter() - self.waiting.popleft())
        self.run.readings += self.readings
        status = msgspec.json.decode(answer).get("status")
        if status is not None:
            self.run.bad[b"%d" % status] = self.run.bad.get(b"%d" % status, 0) + 1
        self.room.release()

    async def all_answered(self) -> None:
        """Wait for the last answers."""
        for _ in range(WINDOW):
            await asyncio.wait_for(self.room.acquire(), 30)


async def send_all_by_socket(port: int, stations: list[tuple[str, Iterator[bytes]]], readings: int, every_s: float | None) -> Run:
    """Each station (key, bodies) over its own WebSocket."""
    run, began = Run(), time.perf_counter()

    async def station(key: str, bodies: Iterator[bytes], phase: float) -> None:
        lane = Lane(run, readings, Due(every_s, phase))
        async with connect(f"ws://127.0.0.1:{port}/api/v1/readings/stream", compression=None, proxy=None,
                           additional_headers={"Authorization": f"Bearer {key}"}) as socket:
            async def hear() -> None:
                async for answer in socket:
                    lane.take(answer)

            hearing = asyncio.create_task(hear())
            async for body in lane.next_batches(bodies):
                await socket.send(body)
            await lane.all_answered()
            hearing.cancel()

    await asyncio.gather(*(station(*each, index / len(stations)) for index, each in enumerate(stations)))
    run.duration_s = time.perf_counter() - began
    return run


async def send_all_by_mqtt(port: int, stations: list[tuple[str, str, Iterator[bytes]]], readings: int,
                           every_s: float | None) -> Run:
    """Each station (name, key, bodies) as a client of its own at the broker, QoS 1."""
    run, loop = Run(), asyncio.get_running_loop()

    async def station(name: str, key: str, bodies: Iterator[bytes], phase: float, is_ready: asyncio.Event) -> None:
        lane = Lane(run, readings, Due(every_s, phase))
        client = paho.Client(paho.CallbackAPIVersion.VERSION2)
        client.username_pw_set(name, key)
        client.on_connect = lambda *_: client.subscribe(f"labmon/v1/{name}/answer")
        client.on_subscribe = lambda *_: loop.call_soon_threadsafe(is_ready.set)
        client.on_message = lambda _, __, message: loop.call_soon_threadsafe(lane.take, message.payload)
        client.connect("127.0.0.1", port)
        client.loop_start()
        await asyncio.wait_for(is_ready.wait(), 20)
        async for body in lane.next_batches(bodies):
            client.publish(f"labmon/v1/{name}/readings", body, 1)
        await lane.all_answered()
        client.disconnect()
        client.loop_stop()

    began = time.perf_counter()
    await asyncio.gather(*(station(*each, index / len(stations), asyncio.Event()) for index, each in enumerate(stations)))
    run.duration_s = time.perf_counter() - began
    return run
