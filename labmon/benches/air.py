"""Which climate sensor tells a tap's room temperature."""

from ingest.models import Tap, TapKind


def air_tap(tap: Tap) -> Tap | None:
    """The climate tap that shares the tap's room: the first made, if there are several."""
    if tap.station.room_id is None:
        return None
    sensors = Tap.objects.filter(kind=TapKind.CLIMATE, station__room_id=tap.station.room_id)
    return sensors.order_by("pk").first()
