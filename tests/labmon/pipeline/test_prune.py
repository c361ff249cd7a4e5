import pytest

from analysis.models import TapCheckpoint
from labmon.pipeline.prune import prune_checkpoints
from tests.factories import NOON_US, make_tap

pytestmark = pytest.mark.django_db
HOUR_US = 3_600_000_000


def test_checkpoints_thin_out_with_age_and_the_first_stays():
    tap = make_tap()
    first_us = NOON_US - 100 * 24 * HOUR_US + 1_000_000
    times = [
        first_us,
        *(NOON_US - hours * HOUR_US - minutes * 60_000_000 for hours in (1, 30, 70 * 24) for minutes in range(0, 60, 10)),
    ]
    TapCheckpoint.objects.bulk_create(TapCheckpoint(tap=tap, at_us=at_us, state={}) for at_us in times)
    prune_checkpoints(now_us=NOON_US)
    kept = set(TapCheckpoint.objects.values_list("at_us", flat=True))
    assert first_us in kept
    assert len([at_us for at_us in kept if at_us > NOON_US - 24 * HOUR_US]) == 6
    assert [at_us for at_us in kept if NOON_US - 40 * HOUR_US < at_us < NOON_US - 24 * HOUR_US] == [NOON_US - 30 * HOUR_US]
    assert not [at_us for at_us in kept if first_us < at_us < NOON_US - 60 * 24 * HOUR_US]
