"""Reading the logbook: which changes cut a bench's history."""

from collections.abc import Collection
from datetime import datetime

from django.db.models import Q

from ingest.models import Station, Tap
from labmon.logbook.models import ConfigurationChange


def configuration_changes(tap_or_station: Tap | Station, since: datetime) -> list[datetime]:
    """When the configuration changed from ``since`` on, oldest first, each time once.

    Of a tap: its own changes and those of the whole bench. Of a station: all of them. Withdrawn ones do not count.
    """
    changes = ConfigurationChange.objects.filter(at__gte=since, withdrawn_at=None)
    if isinstance(tap_or_station, Tap):
        changes = changes.filter(Q(tap=None) | Q(tap=tap_or_station), station_id=tap_or_station.station_id)
    else:
        changes = changes.filter(station=tap_or_station)
    return list(changes.order_by("at").values_list("at", flat=True).distinct())


def configuration_changes_of(taps: Collection[Tap], since: datetime) -> dict[int, list[datetime]]:
    """The same for many taps, by tap id; one query."""
    rows = list(
        ConfigurationChange.objects.filter(station__in={tap.station_id for tap in taps}, at__gte=since, withdrawn_at=None)
        .order_by("at").values_list("station_id", "tap_id", "at")
    )
    return {
        tap.pk: list(dict.fromkeys(at for station_id, tap_id, at in rows
                                   if station_id == tap.station_id and tap_id in (None, tap.pk)))
        for tap in taps
    }
