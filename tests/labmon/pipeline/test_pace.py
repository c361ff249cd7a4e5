import pytest

from labmon.pipeline.process import patience_us, process_touched
from tests.factories import NOON_US, make_tap, store_readings
from tests.labmon.pipeline.lab import S, ports_of


@pytest.mark.parametrize(("marked", "wait_us"), [(0, 0), (1, 0), (100, 0), (200, 150_000), (1000, 1_200_000), (10**6, 1_200_000)])
def test_few_taps_are_judged_at_once_and_many_wait_a_little(marked, wait_us):
    assert patience_us(marked) == wait_us


@pytest.mark.django_db
def test_marks_of_many_taps_wait_and_are_then_all_judged():
    for _ in range(120):
        store_readings(make_tap(), [NOON_US], **ports_of([30.0]))
    assert process_touched(now_us=NOON_US + 10_000, is_paced=True).taps == 0
    assert process_touched(now_us=NOON_US + 30_000, is_paced=True).taps == 120
    assert process_touched(now_us=NOON_US + S, is_paced=True).taps == 0
