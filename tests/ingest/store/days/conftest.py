"""A station whose readings of a past day lie in blocks, and what is stored of them."""

import shutil

import pytest

from ingest.store.days.seal import day_of
from ingest.store.days.storage import days_storage
from ingest.store.seal import seal_tap
from tests.ingest.conftest import two_port

S = 1_000_000
#: A day that is long over.
DAY_US = day_of(1_750_000_000 * S)


@pytest.fixture
def past_day(sender):
    """30 readings of the day in blocks of three slots."""
    shutil.rmtree(days_storage().path("bench-1"), ignore_errors=True)
    for first in (0, 700, 40_000):
        sender.send(two_port(first, 10, start_us=DAY_US))
    seal_tap(sender.tap().pk)
    return sender


def late(sender, first=20, count=5):
    """Late readings of that day, in blocks."""
    sender.send(two_port(first, count, start_us=DAY_US))
    seal_tap(sender.tap().pk)
