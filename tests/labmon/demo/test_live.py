"""Live readings are those of the world, each once, whatever the rhythm of asking."""

import numpy as np

from labmon.demo.benches import bench_named
from labmon.demo.excursions import live_excursions
from labmon.demo.ledger import LEDGER
from labmon.demo.live import Instrument, SharedWorld, _bench_instrument
from labmon.demo.moments import moment
from labmon.demo.world import SEED, World


def test_an_instrument_hands_out_each_reading_once():
    instrument = Instrument(times=lambda first, last: np.arange(np.ceil(first), last, 1.0),
                            columns=lambda at_s: {"port1": 2 * at_s}, taken_until_s=100.0)
    taken, moment_s = [], 100.0
    for wait_s in (0.2, 0.2, 1.7, 0.0, 700.0, 3.3, 295.0):
        moment_s += wait_s
        at_s, columns = instrument.until(moment_s)
        np.testing.assert_array_equal(columns.get("port1", np.empty(0)), 2 * at_s)
        taken.extend(at_s)
    np.testing.assert_array_equal(taken, np.arange(100.0, np.ceil(moment_s)))


def test_live_readings_are_those_of_the_world():
    start_s = moment(15, 10)
    bench = bench_named("V2")
    at_s, columns = _bench_instrument(bench, SharedWorld(SEED, start_s), start_s).until(start_s + 30.0)
    assert len(at_s) == 30
    world = World(17, SEED, LEDGER.with_rows(live_excursions(start_s)))
    np.testing.assert_array_equal(columns["port1"], world.readings(bench, at_s)["port1"])


def test_the_world_grows_when_the_days_are_used_up():
    shared = SharedWorld(SEED, 0.0)
    assert shared.reaching(moment(2, 3)) is shared.reaching(moment(2, 4))
    assert shared.reaching(moment(9, 0)).covers(moment(9, 23))
