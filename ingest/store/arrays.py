"""Arrays to compressed bytes and back: small integer differences, runs, and planes of floating-point numbers.

Every frame carries a checksum that is verified when it is opened.
"""

import threading
from typing import Any

import numpy as np
import numpy.typing as npt
import zstandard

Array = npt.NDArray[Any]
_SHORT = 64  # below this many bytes two trials cost more than they save
_local = threading.local()


class DamagedBody(ValueError):
    """Stored bytes are not what was written; the message says which part."""


def compress(raw: bytes) -> bytes:
    """One frame with its checksum."""
    if not hasattr(_local, "writer"):
        _local.writer = zstandard.ZstdCompressor(level=1, write_checksum=True)
    return _local.writer.compress(raw)


def decompress(frame: bytes | memoryview, size: int) -> bytes:
    """The ``size`` bytes of a frame.

    Raises:
        DamagedBody: The frame is damaged.
    """
    if not hasattr(_local, "reader"):
        _local.reader = zstandard.ZstdDecompressor()
    try:
        raw = _local.reader.decompress(frame, max_output_size=size)
    except zstandard.ZstdError as error:
        raise DamagedBody(f"a compressed part cannot be opened: {error}") from error
    if len(raw) != size:
        raise DamagedBody(f"a compressed part has {len(raw)} bytes, {size} were written")
    return raw


def pack_integers(values: Array) -> tuple[list[Any], bytes]:
    """int64 values as a description and a frame: constant, even steps, or differences of the smallest size that holds them."""
    first, count = int(values[0]), len(values)
    steps = np.diff(values)
    if not steps.any():
        return ["const", first], b""
    step = int(steps[0])
    if bool((steps == step).all()):
        return ["steps", first, step], b""
    step = int(np.median(steps)) if count < 1000 else int(np.partition(steps, len(steps) // 2)[len(steps) // 2])
    rest = steps - step
    low, high = int(rest.min()), int(rest.max())
    size = next(size for size in (1, 2, 4, 8) if -(1 << 8 * size - 1) <= low and high < 1 << 8 * size - 1)
    raw = rest.astype(f"<i{size}")
    return ["differences", first, step, size], compress(_planes(raw.view(np.uint8).reshape(-1, size)))


def unpack_integers(how: list[Any], frame: memoryview, count: int) -> Array:
    """The int64 values that ``pack_integers`` was given, shape (count,)."""
    kind, first = how[0], how[1]
    if kind == "const":
        return np.full(count, first, np.int64)
    if kind == "steps":
        return np.arange(count, dtype=np.int64) * how[2] + first
    step, size = how[2], how[3]
    raw = np.frombuffer(decompress(frame, (count - 1) * size), np.uint8)
    rest = _woven(raw, size).reshape(-1).view(f"<i{size}") if size > 1 else raw.view(np.int8)
    values = np.empty(count, np.int64)
    values[0] = first
    values[1:] = rest
    values[1:] += step
    return np.cumsum(values, out=values)


def pack_runs(values: Array) -> tuple[list[Any], bytes]:
    """int64 values that stay equal over stretches."""
    starts = np.concatenate([[0], np.flatnonzero(values[1:] != values[:-1]) + 1])
    if len(starts) == 1:
        return ["const", int(values[0])], b""
    if len(starts) > len(values) // 2:
        return pack_integers(values)
    how, kept = pack_integers(values[starts])
    lengths_how, lengths = pack_integers(np.diff(np.append(starts, len(values))))
    return ["runs", len(starts), how, len(kept), lengths_how], kept + lengths


def unpack_runs(how: list[Any], frame: memoryview, count: int) -> Array:
    """The int64 values that ``pack_runs`` was given, shape (count,)."""
    if how[0] != "runs":
        return unpack_integers(how, frame, count)
    _, runs, values_how, split, lengths_how = how
    values = unpack_integers(values_how, frame[:split], runs)
    lengths = unpack_integers(lengths_how, frame[split:], runs)
    if int(lengths.sum()) != count or int(lengths.min()) < 1:
        raise DamagedBody("the lengths of runs do not add up")
    return np.repeat(values, lengths)


def pack_numbers(values: Array) -> tuple[list[Any], bytes]:
    """float64 or float32 values, kept to the last bit: constant, plain, or as planes of 16 bits, whichever is smallest."""
    words = np.ascontiguousarray(values).view(f"<u{values.itemsize}")
    if not (words[1:] != words[0]).any():
        return ["const", int(words[0])], b""
    raw = words.tobytes()
    plain = compress(raw)
    if len(raw) <= _SHORT:
        return ["plain"], plain
    planes = compress(_planes(words.view("<u2").reshape(len(words), -1)))
    return (["plain"], plain) if len(plain) <= 1.05 * len(planes) else (["planes"], planes)


def unpack_numbers(how: list[Any], frame: memoryview, count: int, dtype: str) -> Array:
    """The values that ``pack_numbers`` was given, shape (count,)."""
    size = int(dtype[-1])
    if how[0] == "const":
        return np.full(count, how[1], f"<u{size}").view(f"<{dtype}")
    raw = np.frombuffer(decompress(frame, count * size), "<u2" if how[0] == "planes" else f"<{dtype}")
    return _woven(raw, size // 2).reshape(-1).view(f"<{dtype}") if how[0] == "planes" else raw


def _planes(words: Array) -> bytes:
    """Rows of small words as planes: first all first words, then all second ones."""
    return words.tobytes() if words.shape[1] == 1 else np.ascontiguousarray(words.T).tobytes()


def _woven(planes: Array, width: int) -> Array:
    """The reverse of ``_planes``: shape (count, width)."""
    by_plane = planes.reshape(width, -1)
    words = np.empty(by_plane.shape[::-1], planes.dtype)
    for number in range(width):
        words[:, number] = by_plane[number]
    return words
