"""What the door knows of a station beside its readings: how its program does, what came again, whether its line broke."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Final

from django.db.models import Max, Sum

from ingest.models import Station, StationBoot
from ingest.times import SECOND_US, at_of
from labmon.benches.models import ClientState, DoorHour

#: A station that was heard so lately lives: bench clients are heard every 30 s, whatever their instruments do.
LIVES_WITHIN_US: Final = 90 * SECOND_US
#: A tap from which nothing came for so long before its station was heard has a source that gives nothing.
MUTE_BEFORE_US: Final = 20 * SECOND_US
#: Repeats of so long are counted on the page.
COUNTED_BACK: Final = timedelta(hours=24)


@dataclass(frozen=True, slots=True)
class DoorFacts:
    """``client`` is None where no program told of itself; ``known`` and ``disordered`` count readings of the last day.

    ``link_lost_at`` is set where a broker told of a broken line and nothing has come since.
    """

    client: ClientState | None = None
    known: int = 0
    disordered: int = 0
    newest_hour_at: datetime | None = None
    heard_us: int | None = None
    link_lost_at: datetime | None = None

    def is_mute(self, last_arrival_us: int, now_us: int) -> bool:
        """Whether a tap last heard then gives nothing while its station lives."""
        if self.heard_us is None:
            return False
        return now_us - self.heard_us <= LIVES_WITHIN_US and self.heard_us - last_arrival_us >= MUTE_BEFORE_US

    def names_mute(self, tap: str, now_us: int) -> bool:
        """Whether the station's program lives and says that this tap's instrument does not answer."""
        told = self.client
        return told is not None and tap in told.mute and now_us - told.told_at.timestamp() * 1e6 <= LIVES_WITHIN_US


def door_facts(station: Station, boots: Sequence[StationBoot], now_us: int) -> DoorFacts:
    """Two queries.

    Args:
        boots: The station's newest boots.
    """
    hours = DoorHour.objects.filter(station=station, hour_at__gt=at_of(now_us) - COUNTED_BACK)
    counted = hours.aggregate(known=Sum("known"), disordered=Sum("disordered"), newest=Max("hour_at"))
    heard_us = max((boot.last_arrival_us for boot in boots), default=None)
    lost_at = station.link_lost_at
    is_broken = lost_at is not None and (heard_us is None or lost_at > at_of(heard_us))
    return DoorFacts(ClientState.objects.filter(station=station).first(), counted["known"] or 0, counted["disordered"] or 0,
                     counted["newest"], heard_us, lost_at if is_broken else None)
