"""What alarms have in common, and when that may be called the shared thing. Pure."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from enum import StrEnum
from typing import Final

from labmon.events.models import EventKind

#: Alarms that begin no further apart are of one event (proposed by the lab's own plan; common practice, no source).
TOGETHER_WITHIN: Final = timedelta(seconds=30)
#: So many benches make one thing that all of them share the likely place to look, though others that share it are calm.
ENOUGH_BENCHES: Final = 3


class ThingKind(StrEnum):
    """What benches may share."""

    BENCH = "bench"
    ROOM = "room"
    LASER = "laser"
    LOGGER = "logger"
    NETWORK = "network"


#: A network cannot turn polarization, a laser cannot silence a station.
PLAUSIBLE: Final = {
    EventKind.LIGHT: (ThingKind.BENCH, ThingKind.ROOM, ThingKind.LASER, ThingKind.LOGGER),
    EventKind.SILENCE: (ThingKind.BENCH, ThingKind.ROOM, ThingKind.LOGGER, ThingKind.NETWORK),
}
Thing = tuple[str, str]
Span = tuple[datetime, datetime]


@dataclass(frozen=True, slots=True)
class BenchThings:
    """What one bench is part of; empty where nobody said."""

    bench: str
    room: str = ""
    laser: str = ""
    logger: str = ""
    network: str = ""
    is_drill: bool = False

    def things(self, kind: str) -> list[Thing]:
        """Those that could make an event of this kind, the bench itself first."""
        return [(one.value, getattr(self, one)) for one in PLAUSIBLE[EventKind(kind)] if getattr(self, one)]


def is_together(one: Span, other: Span) -> bool:
    """True if two beginnings, each known to lie within a span, can be no further apart than `TOGETHER_WITHIN`."""
    return one[0] - other[1] <= TOGETHER_WITHIN and other[0] - one[1] <= TOGETHER_WITHIN


def common(things: Iterable[Thing], others: Iterable[Thing]) -> list[Thing]:
    """Things of both, in the order of the first."""
    known = {tuple(one) for one in others}
    return [tuple(one) for one in things if tuple(one) in known]


def shared_thing(things: Iterable[Thing], benches: set[str], members: Mapping[Thing, set[str]]) -> Thing | None:
    """The thing that explains an event on its own; None where it is one bench, or where it could as well be another thing.

    Args:
        things: What all of the event's benches share.
        benches: The event's benches.
        members: All watched benches of each thing.
    """
    if len(benches) < 2:
        return None
    candidates = [tuple(one) for one in things if one[0] != ThingKind.BENCH]
    whole = [one for one in candidates if members.get(one, set()) <= benches]
    if len(whole) == 1:
        return whole[0]
    if len(candidates) == 1 and len(benches) >= ENOUGH_BENCHES:
        return candidates[0]
    return None
