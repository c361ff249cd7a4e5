"""When the door was up: one span a life, and a new one after a break."""

import pytest

from ingest.database import shared
from ingest.door import presence
from ingest.models import DoorUp

S = 1_000_000


@pytest.fixture
def clock(monkeypatch):
    """A clock that tests set, s."""
    moment = {"s": 1000.0}
    monkeypatch.setattr(presence.time, "monotonic", lambda: moment["s"])
    monkeypatch.setattr(presence, "now_us", lambda: int(moment["s"] * S))
    return moment


@pytest.mark.django_db
def test_a_span_grows_each_second_and_breaks_when_beats_are_missed(clock):
    door = presence.Presence()
    for second in (1000, 1001, 1002, 1004, 1020, 1021):
        clock["s"] = float(second)
        assert door.is_due()
        door.beat(shared())
        assert not door.is_due() and door.wait_s() == 1.0
    assert list(DoorUp.objects.order_by("from_us").values_list("from_us", "until_us")) == [
        (1000 * S, 1004 * S),
        (1020 * S, 1021 * S),
    ]
