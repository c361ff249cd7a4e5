"""Bodies for load: values made once, numbers and times written anew for each batch, so that the sender costs little."""

import time
from collections.abc import Iterator
from dataclasses import dataclass

import msgspec
import numpy as np

from benchmarks.sender import COLUMNS, Batch


@dataclass(frozen=True, slots=True)
class Maker:
    """Makes the batches of one station: ``each`` readings of every tap, ``step_us`` apart.

    Numbers of readings go on where an earlier maker of the same station ended, if ``first`` says so.
    """

    key: str
    taps: list[str]
    each: int
    step_us: int
    is_msgpack: bool
    first: int = 0

    @property
    def readings(self) -> int:
        """Of one batch."""
        return self.each * len(self.taps)

    def bodies(self, until_s: float) -> Iterator[bytes]:
        """Bodies until ``time.perf_counter()`` is past ``until_s``."""
        values = {name: 1e-3 * (1 + 1e-3 * np.random.default_rng(5).standard_normal(self.each)) for name in COLUMNS}
        packed = {name: column.tobytes() for name, column in values.items()}
        written = msgspec.json.encode({name: column.tolist() for name, column in values.items()})[1:]
        start_us, number = time.time_ns() // 1000 - 600 * 10**6, self.first
        while time.perf_counter() < until_s:
            sequence = np.arange(number, number + self.each, dtype=np.int64)
            at_us = start_us + (sequence - self.first) * self.step_us
            if self.is_msgpack:
                columns = {"sequence": sequence.tobytes(), "at": at_us.tobytes()} | packed
                yield msgspec.msgpack.encode({"boot": "b1", "taps": dict.fromkeys(self.taps, columns)})
            else:
                stamps = [text + "Z" for text in np.datetime_as_string(at_us.astype("datetime64[us]"))]
                part = msgspec.json.encode({"sequence": sequence.tolist(), "at": stamps})[:-1] + b"," + written
                yield b'{"boot":"b1","taps":{' + b",".join(b'"%s":%s' % (tap.encode(), part) for tap in self.taps) + b"}}"
            number += self.each

    def requests(self, until_s: float) -> Iterator[Batch]:
        """The same as HTTP requests."""
        kind = b"msgpack" if self.is_msgpack else b"json"
        head = (b"POST /api/v1/readings HTTP/1.1\r\nHost: 127.0.0.1\r\nAuthorization: Bearer " + self.key.encode()
                + b"\r\nContent-Type: application/" + kind + b"\r\nContent-Length: ")
        for body in self.bodies(until_s):
            yield Batch(head + str(len(body)).encode() + b"\r\n\r\n" + body, self.readings)
