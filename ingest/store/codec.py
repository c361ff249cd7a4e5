"""Bodies of the store: one batch as it waits in the inbox, and one slot as it lies in a block.

A batch is plain (a header and the columns one after the other); a block is compressed column by column. Both give back
exactly what went in, and say so if they cannot.
"""

import struct
import zlib
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import msgspec
import numpy as np

from ingest.store.arrays import (
    Array,
    DamagedBody,
    compress,
    decompress,
    pack_integers,
    pack_numbers,
    pack_runs,
    unpack_integers,
    unpack_numbers,
    unpack_runs,
)
from ingest.store.columns import NO_SEQUENCE, NO_TIME, Readings

_BATCH = struct.Struct("<2sHIqqHH")  # mark, bytes of names, readings, first sequence, sent_us, columns, what is inside
_BLOCK = struct.Struct("<2sHII")  # mark, 0, bytes of header, crc of header
SEQUENCE_STEPS, SEQUENCE_NONE, OWN_SAME, OWN_NONE, SERVER_TIMED, HAS_UNKNOWN = (1 << bit for bit in range(6))
_SEPARATOR = "\x1f"


@dataclass(slots=True)
class Batch:
    """One batch of one tap as the inbox keeps it; boot and arrival lie in the row beside the body."""

    at_us: Array
    names: tuple[str, ...]
    values: Array
    """Shape (columns, N), float64."""
    sequence: Array
    own_at_us: Array
    sent_us: int
    is_server_timed: bool
    unknown: Array | None = None


def pack_batch(batch: Batch) -> bytes:
    """The body of an inbox row."""
    count, inside, parts = len(batch.at_us), 0, [batch.at_us.tobytes()]
    first = int(batch.sequence[0]) if count else 0
    if first == NO_SEQUENCE and (batch.sequence == NO_SEQUENCE).all():
        inside |= SEQUENCE_NONE
    elif int(batch.sequence[-1]) - first == count - 1 and (np.diff(batch.sequence) == 1).all():
        inside |= SEQUENCE_STEPS
    else:
        parts.append(batch.sequence.tobytes())
    if (batch.own_at_us == batch.at_us).all():
        inside |= OWN_SAME
    elif (batch.own_at_us == NO_TIME).all():
        inside |= OWN_NONE
    else:
        parts.append(batch.own_at_us.tobytes())
    if batch.is_server_timed:
        inside |= SERVER_TIMED
    parts.append(batch.values.tobytes())
    if batch.unknown is not None:
        inside |= HAS_UNKNOWN
        parts.append(msgspec.msgpack.encode(batch.unknown.tolist()))
    names = _joined_names(batch.names)
    return b"".join((_BATCH.pack(b"i1", len(names), count, first, batch.sent_us, len(batch.names), inside), names, *parts))


def pack_even_batch(at_us: Array, names: tuple[str, ...], values: Array, first_sequence: int, sent_us: int) -> bytes:
    """The body of the usual batch: numbered without a hole, placed by the station's own stamps."""
    joined = _joined_names(names)
    head = _BATCH.pack(b"i1", len(joined), len(at_us), first_sequence, sent_us, len(names), SEQUENCE_STEPS | OWN_SAME)
    return b"".join((head, joined, at_us.tobytes(), values.tobytes()))


@lru_cache(maxsize=4096)
def _joined_names(names: tuple[str, ...]) -> bytes:
    return _SEPARATOR.join(names).encode()


def unpack_batch(body: bytes, crc: int) -> Batch:
    """The batch of an inbox row.

    Raises:
        DamagedBody: The body is not what ``pack_batch`` made.
    """
    if zlib.crc32(body) != crc:
        raise DamagedBody("the checksum of a batch does not fit its content")
    mark, names_size, count, first, sent_us, width, inside = _BATCH.unpack_from(body)
    if mark != b"i1":
        raise DamagedBody(f"a batch begins with {mark!r}; this program reads version i1")
    place = _BATCH.size
    names = tuple(body[place:place + names_size].decode().split(_SEPARATOR)) if width else ()
    place += names_size
    at_us = np.frombuffer(body, np.int64, count, place)
    place += 8 * count
    if inside & SEQUENCE_NONE:
        sequence = np.full(count, NO_SEQUENCE, np.int64)
    elif inside & SEQUENCE_STEPS:
        sequence = np.arange(first, first + count, dtype=np.int64)
    else:
        sequence = np.frombuffer(body, np.int64, count, place)
        place += 8 * count
    if inside & OWN_SAME:
        own_at_us = at_us
    elif inside & OWN_NONE:
        own_at_us = np.full(count, NO_TIME, np.int64)
    else:
        own_at_us = np.frombuffer(body, np.int64, count, place)
        place += 8 * count
    values = np.frombuffer(body, np.float64, width * count, place).reshape(width, count)
    place += 8 * width * count
    unknown = None
    if inside & HAS_UNKNOWN:
        unknown = _objects(msgspec.msgpack.decode(body[place:]))
    return Batch(at_us, names, values, sequence, own_at_us, sent_us, bool(inside & SERVER_TIMED), unknown)


def pack_block(readings: Readings) -> bytes:
    """The body of a block; at least one reading."""
    columns: list[list[Any]] = []
    frames: list[bytes] = []

    def add(name: str, how: list[Any], frame: bytes, dtype: str = "") -> None:
        columns.append([name, how, len(frame), dtype])
        frames.append(frame)

    add("at", *pack_integers(readings.at_us))
    add("boot", *pack_runs(readings.boot_id))
    add("sequence", *pack_integers(readings.sequence))
    add("own", *_pack_own(readings))
    add("arrival", *pack_runs(readings.arrival_us))
    add("sent", *pack_runs(readings.sent_us))
    add("timed", *pack_runs(readings.is_server_timed.astype(np.int64)))
    for name, values in readings.columns.items():
        add(name, *pack_numbers(values), values.dtype.str[1:])
    if readings.unknown is not None:
        raw = msgspec.msgpack.encode(readings.unknown.tolist())
        add("", ["unknown", len(raw)], compress(raw))
    header = msgspec.msgpack.encode([len(readings), columns])
    return b"".join([_BLOCK.pack(b"b1", 0, len(header), zlib.crc32(header)), header, *frames])


def unpack_block(body: bytes, wanted: frozenset[str] | None = None, *, as_sent: bool = False) -> Readings:
    """The readings of a block; ``wanted`` names the columns to open (None: all).

    Values are float64, or keep the dtype that was packed where ``as_sent``.

    Raises:
        DamagedBody: The body is not what ``pack_block`` made.
    """
    if len(body) < _BLOCK.size:
        raise DamagedBody("a block is cut off")
    mark, spare, size, crc = _BLOCK.unpack_from(body)
    if mark != b"b1" or spare:
        raise DamagedBody(f"a block begins with {mark!r}; this program reads version b1")
    view = memoryview(body)
    header = view[_BLOCK.size:_BLOCK.size + size]
    if zlib.crc32(header) != crc:
        raise DamagedBody("the checksum of a block's header does not fit its content")
    count, described = msgspec.msgpack.decode(header)
    place = _BLOCK.size + size
    if len(body) != place + sum(column[2] for column in described):
        raise DamagedBody("a block is cut off or has bytes too many")
    found: list[Any] = []
    columns: dict[str, Array] = {}
    unknown = None
    for number, (name, how, length, dtype) in enumerate(described):
        frame = view[place:place + length]
        place += length
        if number == 0 or number == 2:
            found.append(unpack_integers(how, frame, count))
        elif number == 3:
            found.append(_unpack_own(how, frame, count, found[0]))
        elif number < 7:
            found.append(unpack_runs(how, frame, count))
        elif name:
            if wanted is None or name in wanted:
                values = unpack_numbers(how, frame, count, dtype)
                columns[name] = values if as_sent else values.astype(np.float64, copy=False)
        else:
            unknown = _objects(msgspec.msgpack.decode(decompress(frame, how[1])))
    at_us, boot_id, sequence, own_at_us, arrival_us, sent_us, timed = found
    return Readings(at_us, columns, boot_id, sequence, own_at_us, arrival_us, sent_us, timed.astype(np.bool_), unknown)


def block_columns(head: bytes) -> dict[str, str]:
    """Value columns of a block with their dtype, in order, from the first bytes of its body; "" stands for unknown ones.

    Raises:
        DamagedBody: These are not the first bytes of a block, or too few.
    """
    if len(head) < _BLOCK.size:
        raise DamagedBody("a block is cut off")
    mark, _, size, crc = _BLOCK.unpack_from(head)
    header = head[_BLOCK.size:_BLOCK.size + size]
    if mark != b"b1" or zlib.crc32(header) != crc:
        raise DamagedBody("the checksum of a block's header does not fit its content")
    return {name: dtype for name, _, _, dtype in msgspec.msgpack.decode(header)[1][7:]}


def _pack_own(readings: Readings) -> tuple[list[Any], bytes]:
    """The station's own stamps: mostly the same as, or evenly apart from, the time axis."""
    if (readings.own_at_us == readings.at_us).all():
        return ["same"], b""
    if (readings.own_at_us == NO_TIME).all():
        return ["none"], b""
    how, frame = pack_integers(readings.own_at_us - readings.at_us)
    return ["apart", how], frame


def _unpack_own(how: list[Any], frame: memoryview, count: int, at_us: Array) -> Array:
    if how[0] == "same":
        return at_us
    if how[0] == "none":
        return np.full(count, NO_TIME, np.int64)
    return unpack_integers(how[1], frame, count) + at_us


def _objects(texts: list[str]) -> Array:
    made = np.empty(len(texts), object)
    made[:] = texts
    return made
