"""What becomes of readings on their way: restarts, wrong clocks, outages with and without buffers, two devices."""

import numpy as np
import pytest

from labmon.demo.benches import BENCHES, bench_named
from labmon.demo.ledger import LEDGER
from labmon.demo.lives import ahead_at, deliveries, lives_of, spares_of
from labmon.demo.moments import moment
from labmon.demo.world import SEED

UNTIL_S = moment(15, 0)
CADENCES = [(UNTIL_S, 1.0)]


def _deliveries(name):
    return list(deliveries(bench_named(name), UNTIL_S, CADENCES, LEDGER, SEED))


def test_every_bench_numbers_its_readings_without_a_hole_while_it_has_a_network():
    for name in ("N1", "N3", "V2"):
        (only,) = _deliveries(name)
        np.testing.assert_array_equal(only.sequence, np.arange(len(only.at_s)))
        assert len(only.at_s) == pytest.approx(UNTIL_S, abs=3)
        assert np.all(np.diff(only.at_s) > 0)
        assert np.all((only.arrival_s > only.at_s) & (only.arrival_s - only.at_s < 11.0))


def test_polarimeters_read_unevenly_and_boards_do_not():
    assert np.diff(_deliveries("N1")[0].at_s).std() > 0.05
    assert np.diff(_deliveries("V2")[0].at_s).std() < 1e-6


def test_day_2_the_clock_of_v1_is_seven_minutes_ahead_to_the_end():
    first, second, third = _deliveries("V1")
    np.testing.assert_array_equal(first.own_s, first.at_s)
    for later in (second, third):
        np.testing.assert_allclose(later.own_s - later.at_s, 420.0, atol=3.0)
        assert later.life.clock_fault == "The clock is 7 min ahead of the server's."
    assert second.at_s[0] == pytest.approx(moment(2, 8), abs=30)
    assert ahead_at(bench_named("V1"), moment(20, 0), LEDGER) == pytest.approx(420.0, abs=3.0)


def test_day_8_v1_restarts_with_new_firmware():
    lives = lives_of(bench_named("V1"), UNTIL_S, LEDGER, SEED)
    assert [life.firmware for life in lives] == ["bench pc 2.0", "bench pc 2.0", "bench pc 2.1"]
    assert len({life.boot for life in lives}) == 3


def test_day_11_n2_has_a_gap_of_35_seconds_and_a_clock_at_1970_for_40():
    before, after = _deliveries("N2")
    assert after.at_s[0] - before.at_s[-1] == pytest.approx(35.0, abs=1.5)
    assert np.isnan(after.own_s).sum() == pytest.approx(40, abs=1)
    assert np.isnan(after.own_s[:39]).all()
    assert after.sequence[0] == 0
    assert after.life.clock_fault


@pytest.mark.parametrize(("name", "lost_min"), [("S1", 0), ("S2", 40), ("S4", 20), ("S3", 200)])
def test_day_12_outage_each_station_brings_what_its_buffer_holds(name, lost_min):
    """South Hall 01:00-04:20: the PC of S1 back-fills all, S2 all but its overrun, S4 3 h of 3 h 20, S3 nothing."""
    span = [(one.at_s[cut], one.arrival_s[cut], one.sequence[cut]) for one in _deliveries(name)
            for cut in [(one.at_s >= moment(12, 1)) & (one.at_s < moment(12, 4, 20))] if not one.life.is_spare]
    at_s, arrival_s, sequence = (np.concatenate(parts) for parts in zip(*span, strict=True))
    assert 12_000 - len(at_s) == pytest.approx(lost_min * 60, abs=2)
    assert np.all(arrival_s >= moment(12, 4, 20))
    if len(at_s):
        np.testing.assert_array_equal(np.diff(sequence), 1)


def test_day_12_outage_touches_no_other_room():
    for name in ("N1", "V2"):
        (only,) = _deliveries(name)
        night = (only.at_s >= moment(12, 1)) & (only.at_s < moment(12, 4, 20))
        assert np.all(only.arrival_s[night] - only.at_s[night] < 11.0)


def test_day_13_a_spare_board_sends_beside_s4():
    own, spare = _deliveries("S4")
    assert spare.life.is_spare
    assert spare.life.boot != own.life.boot
    assert (spare.at_s[0], spare.at_s[-1]) == pytest.approx((moment(13, 15), moment(13, 15, 25)), abs=2)
    beside = (own.at_s >= moment(13, 15)) & (own.at_s < moment(13, 15, 25))
    assert beside.sum() == pytest.approx(1500, abs=2)


def test_boots_do_not_overlap_except_the_spare_boards():
    for bench in BENCHES:
        lives = lives_of(bench, UNTIL_S, LEDGER, SEED)
        assert all(one.end_s < other.start_s for one, other in zip(lives, lives[1:], strict=False))
        assert len(spares_of(bench, UNTIL_S, LEDGER, SEED)) == (bench.name == "S4")
