"""What is said to the door, and what its answer means (CONTRACT 1)."""

from __future__ import annotations

import gzip
import json
from collections.abc import Mapping, Sequence
from typing import Any

from labmon_bench.clock import is_same_power_up, now_us, power_up, uptime_ms
from labmon_bench.spool import Boot, Columns
from labmon_bench.version import FIRMWARE

_PACKED_FROM_BYTES = 1_000


class AnswerFault(Exception):
    """The answer is not of the form that the door promises."""


def message(boot: Boot, columns: Sequence[Columns], told: Mapping[str, Any] | None = None) -> dict[str, Any]:
    """One body; ``now`` is the moment of this call, so make it anew for each attempt.

    Readings from before the PC's last power-up keep their uptimes (their content must not change), but ``now.uptime_ms`` is
    left out: the two do not count from the same moment. ``told`` is how the client itself does.
    """
    now: dict[str, Any] = {"at": now_us()}
    if is_same_power_up(boot.power_up, power_up()):
        now["uptime_ms"] = uptime_ms()
    said: dict[str, Any] = {"boot": boot.name, "now": now, "firmware": FIRMWARE}
    if told is not None:
        said["client"] = dict(told)
    return {**said, "taps": {part.tap: _columns_sent(part) for part in columns}}


def packed(body: Mapping[str, Any]) -> tuple[bytes, dict[str, str]]:
    """Bytes and headers."""
    content = json.dumps(body, separators=(",", ":")).encode()
    headers = {"Content-Type": "application/json"}
    if len(content) >= _PACKED_FROM_BYTES:
        content, headers["Content-Encoding"] = gzip.compress(content, 1), "gzip"
    return content, headers


def accepted_ranges(answer: Any, boot: Boot) -> dict[str, list[tuple[int, int]]]:
    """The closed ranges of numbers that an answer 200 acknowledges, by tap.

    Raises:
        AnswerFault: It is not such an answer; then nothing may be forgotten.
    """
    try:
        accepted = answer["accepted"]
        if accepted["boot"] != boot.name:
            raise AnswerFault(f"the answer is for boot {accepted['boot']!r}, sent was {boot.name!r}")
        return {tap: [(int(first), int(last)) for first, last in ranges] for tap, ranges in accepted["ranges"].items()}
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise AnswerFault(f"the answer does not say what is accepted: {str(answer)[:200]}") from error


def _columns_sent(part: Columns) -> dict[str, list[Any]]:
    made: dict[str, list[Any]] = {"sequence": part.sequence, "at": part.at_us}
    if any(uptime is not None for uptime in part.uptime_ms):
        made["uptime_ms"] = part.uptime_ms
    made.update(zip(part.names, part.values))
    if any(part.more):
        rows = [json.loads(more) if more else {} for more in part.more]
        made.update({name: [row.get(name) for row in rows] for name in sorted({name for row in rows for name in row})})
    return made
