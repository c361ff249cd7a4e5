"""A station, its key, and the door it sends to: in this process, on its own database connection, as in a real lab."""

import asyncio
from typing import Any

import httpx
import pytest

from ingest.door.asgi import DoorApplication
from ingest.models import Station, Tap
from ingest.stations import NewTap, add_station
from ingest.store.columns import Readings
from ingest.store.read import read_readings

EVER = (-(2**62), 2**62)
ALL_KINDS = [
    NewTap("eom-in", "two-port", "W"),
    NewTap("dark", "dark-port", "V"),
    NewTap("sop", "stokes", "mW"),
    NewTap("air", "climate"),
    NewTap("adc", "two-port", "count"),
    NewTap("meter", "two-port", "dBm"),
]


class Sender:
    """Sends bodies of one station to a door and reads back what is stored; blocking, for plain tests."""

    def __init__(self, station: Station, key: str, app: DoorApplication | None = None) -> None:
        self.station, self.key = station, key
        self.app = app or DoorApplication()
        self.loop = asyncio.new_event_loop()
        self.client = httpx.AsyncClient(
            transport=httpx.ASGITransport(self.app), base_url="http://lab", headers={"Authorization": f"Bearer {key}"}
        )

    def post(self, body: Any = None, **options: Any) -> httpx.Response:
        """POST a map as JSON, or bytes as they are."""
        content = {"content": body} if isinstance(body, bytes) else {"json": body}
        return self.loop.run_until_complete(self.client.post("/api/v1/readings", **content, **options))

    def send(self, body: Any, **options: Any) -> dict[str, Any]:
        """POST what must be taken; the answer."""
        response = self.post(body, **options)
        assert response.status_code == 200, response.text
        return response.json()

    def together(self, bodies: list[Any]) -> list[httpx.Response]:
        """POST all at once."""

        async def all_of_them() -> list[httpx.Response]:
            return list(await asyncio.gather(*(self.client.post("/api/v1/readings", json=body) for body in bodies)))

        return self.loop.run_until_complete(all_of_them())

    def tap(self, name: str = "eom-in") -> Tap:
        return Tap.objects.get(station=self.station, name=name)

    def stored(self, name: str = "eom-in") -> Readings:
        """All readings of a tap."""
        return read_readings(self.tap(name).pk, *EVER)

    def close(self) -> None:
        self.loop.run_until_complete(self.client.aclose())
        self.loop.run_until_complete(self.app.close())
        self.loop.run_until_complete(self.loop.shutdown_default_executor())
        self.loop.close()


def two_port(
    first: int = 0, count: int = 1, *, boot: str = "7f3a", start_us: int = 1_930_356_665_000_000, **more: Any
) -> dict[str, Any]:
    """A body of ``count`` readings one second apart, with values that tell their number."""
    numbers = list(range(first, first + count))
    columns = {
        "sequence": numbers,
        "at": [start_us + 1_000_000 * number for number in numbers],
        "port1": [1e-3 + 1e-9 * number for number in numbers],
        "port2": [1e-6 + 1e-12 * number for number in numbers],
    }
    return {"boot": boot, "taps": {"eom-in": columns | more}}


@pytest.fixture
def sender(transactional_db):
    """A station with a tap of every kind, and its door."""
    station, key = add_station("bench-1", "cellar", ALL_KINDS)
    made = Sender(station, key)
    yield made
    made.close()
