"""What a bench's program tells of itself beside its readings: a hint for people, never a reason to refuse anything."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

PREFIX: Final = "client_"
"""Columns so named are the same, told beside a reading."""
_LONGEST_TEXT: Final = 200
_GREATEST: Final = (1 << 63) - 1


@dataclass(frozen=True, slots=True)
class ClientHealth:
    """Readings that wait at the bench, that it had to drop, its restarts, what keeps its clock, and taps that are mute."""

    waiting: int | None = None
    dropped: int | None = None
    restarts: int | None = None
    clock: str = ""
    mute: tuple[str, ...] = ()


def client_health(found: Mapping[str, Any]) -> ClientHealth | None:
    """What a decoded body tells: ``client``, or columns ``client_…`` beside its last reading; None where it tells nothing."""
    told = found.get("client")
    if not isinstance(told, dict):
        told = _beside_readings(found.get("taps"))
    if not told:
        return None
    waiting, dropped, restarts = (_count(told.get(name)) for name in ("waiting", "dropped", "restarts"))
    said = told.get("clock")
    clock = said[:_LONGEST_TEXT].replace("\x00", "") if isinstance(said, str) else ""
    return ClientHealth(waiting, dropped, restarts, clock, _names(told.get("mute")))


def _beside_readings(taps: Any) -> dict[str, Any]:
    told: dict[str, Any] = {}
    for sent in taps.values() if isinstance(taps, dict) else ():
        for name, column in sent.items() if isinstance(sent, dict) else ():
            if isinstance(name, str) and name.startswith(PREFIX) and isinstance(column, list):
                newest = next((value for value in reversed(column) if value is not None), None)
                if newest is not None:
                    told[name.removeprefix(PREFIX)] = newest
    return told


def _count(value: Any) -> int | None:
    return value if type(value) is int and 0 <= value <= _GREATEST else None


def _names(value: Any) -> tuple[str, ...]:
    """Names of taps, as a list or as words."""
    words = value.split() if isinstance(value, str) else value
    if not isinstance(words, list):
        return ()
    return tuple(word[:63].replace("\x00", "") for word in words if isinstance(word, str))[:100]
