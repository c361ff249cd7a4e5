"""Notes what a broker says of a station's connection: a hint for people, on which nothing is judged."""

from django.db import connection
from django.utils import timezone

from ingest.models import Station


def note_link_lost(station: str) -> None:
    """The broker published the station's last will; called in a thread of its own."""
    try:
        Station.objects.filter(name=station).update(link_lost_at=timezone.now())
    finally:
        connection.close()
