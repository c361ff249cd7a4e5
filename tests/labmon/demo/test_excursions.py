"""A visitor sees an alarm soon: the first touch takes N4 below its limit long enough to call."""

import numpy as np
import pytest

from labmon.demo.benches import bench_named
from labmon.demo.excursions import EVERY_S, live_excursions
from labmon.demo.ledger import LEDGER
from labmon.demo.moments import moment
from labmon.demo.world import World
from tests.labmon.demo.measured import measured_er_db


@pytest.mark.parametrize("hour", range(0, 24, 4))
def test_n4_is_below_its_limit_for_three_minutes_after_ninety_seconds(hour):
    start_s = moment(15, hour)
    bench = bench_named("N4")
    at_s = start_s + np.arange(0.0, 600.0)
    er_db = measured_er_db(bench, World(16, ledger=LEDGER.with_rows(live_excursions(start_s))).readings(bench, at_s))
    assert er_db[:90].min() > 15.0
    assert er_db[92:270].max() < 15.0
    assert er_db[330:].min() > 15.0


@pytest.mark.parametrize(("number", "name"), [(1, "S4"), (3, "N2")])
def test_later_ones_take_other_benches_below_theirs(number, name):
    start_s = moment(15, 9)
    bench = bench_named(name)
    at_s = start_s + number * EVERY_S + np.arange(0.0, 300.0)
    er_db = measured_er_db(bench, World(16, ledger=LEDGER.with_rows(live_excursions(start_s))).readings(bench, at_s))
    assert er_db[:90].min() > bench.limit.warning - 0.5
    assert er_db[92:270].max() < bench.limit.alarm
