"""Which climate sensor tells a tap's room temperature."""

from ingest.models import Tap, TapKind


def air_tap(tap: Tap) -> int | None:
    """Id of the climate tap that shares the tap's room, or None."""
    if tap.station.room_id is None:
        return None
    return (
        Tap.objects.filter(kind=TapKind.CLIMATE, station__room_id=tap.station.room_id)
        .order_by("pk")
        .values_list("pk", flat=True)
        .first()
    )
