"""A lean HTTP/1.1 client for load: bodies are made beforehand, connections kept, answers only looked at for status."""

import asyncio
import time
from dataclasses import dataclass, field

import msgspec
import numpy as np

COLUMNS = ("port1", "port2", "port2_min", "port2_max", "temperature_c")


@dataclass(frozen=True, slots=True)
class Batch:
    """One request's bytes and how many readings it carries."""

    request: bytes
    readings: int


@dataclass(slots=True)
class Run:
    """What came of a run; latencies in s, measured from the moment the request was due."""

    duration_s: float = 0.0
    readings: int = 0
    latencies_s: list[float] = field(default_factory=list)
    bad: dict[bytes, int] = field(default_factory=dict)

    def percentile_ms(self, share: float) -> float:
        return float(np.quantile(np.array(self.latencies_s), share) * 1e3)


def make_batch(key: str, taps: list[str], each: int, number: int, start_us: int, step_us: int, *, as_msgpack: bool) -> Batch:
    """Batch ``number`` of a station: ``each`` readings of every tap, times ``step_us`` apart."""
    random = np.random.default_rng(number)
    sequence = np.arange(number * each, (number + 1) * each, dtype=np.int64)
    at_us = start_us + sequence * step_us
    values = {name: 1e-3 * (1 + 1e-3 * random.standard_normal(each)) for name in COLUMNS}
    if as_msgpack:
        columns = {"sequence": sequence.tobytes(), "at": at_us.tobytes()} | {n: v.tobytes() for n, v in values.items()}
        body, kind = msgspec.msgpack.encode({"boot": "b1", "taps": dict.fromkeys(taps, columns)}), b"application/msgpack"
    else:
        stamps = [text + "Z" for text in np.datetime_as_string(at_us.astype("datetime64[us]"))]
        columns = {"sequence": sequence.tolist(), "at": stamps} | {n: v.tolist() for n, v in values.items()}
        body, kind = msgspec.json.encode({"boot": "b1", "taps": dict.fromkeys(taps, columns)}), b"application/json"
    head = (b"POST /api/v1/readings HTTP/1.1\r\nHost: 127.0.0.1\r\nAuthorization: Bearer " + key.encode()
            + b"\r\nContent-Type: " + kind + b"\r\nContent-Length: " + str(len(body)).encode() + b"\r\n\r\n")
    return Batch(head + body, each * len(taps))


async def send_all(port: int, lanes: list[list[Batch]], *, every_s: float | None = None) -> Run:
    """Send each lane over its own connection, in order; ``every_s`` paces a lane, None sends as fast as answers come."""
    run, began = Run(), time.perf_counter()
    await asyncio.gather(*(_lane(port, lane, run, every_s, index / len(lanes)) for index, lane in enumerate(lanes)))
    run.duration_s = time.perf_counter() - began
    return run


async def _lane(port: int, lane: list[Batch], run: Run, every_s: float | None, phase: float) -> None:
    reader, writer = await asyncio.open_connection("127.0.0.1", port)
    due = time.perf_counter() + phase * (every_s or 0.0)
    for batch in lane:
        if every_s is not None:
            await asyncio.sleep(max(0.0, due - time.perf_counter()))
        began = due if every_s is not None else time.perf_counter()
        writer.write(batch.request)
        await writer.drain()
        head = await reader.readuntil(b"\r\n\r\n")
        length = next(int(line.split(b":")[1]) for line in head.split(b"\r\n") if line.lower().startswith(b"content-length"))
        await reader.readexactly(length)
        run.latencies_s.append(time.perf_counter() - began)
        if b" 200 " not in head[:15]:
            run.bad[head[:15]] = run.bad.get(head[:15], 0) + 1
        run.readings += batch.readings
        due += every_s or 0.0
    writer.close()
