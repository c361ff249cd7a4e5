"""History written straight into blocks."""

import numpy as np

from ingest.models import InboxRow, TapBoot, TapHeard, Touch
from ingest.stations import NewTap, add_station
from ingest.store.append import write_blocks
from ingest.store.read import read_readings
from tests.ingest.conftest import EVER, two_port

S = 1_000_000


def test_history_is_read_back_and_leaves_one_mark(db):
    tap = add_station("old", None, [NewTap("t", "two-port", "W")])[0].taps.get()
    at_us = 1_900_000_000 * S + np.arange(20_000) * S // 10
    port1 = np.random.default_rng(1).random(20_000)
    assert (
        write_blocks(tap, at_us, {"port1": port1, "port2": port1.astype(np.float32)}, boot="b", sequence=np.arange(20_000))
        == 20_000
    )
    stored = read_readings(tap.pk, *EVER)
    assert stored.at_us.tolist() == at_us.tolist() and stored.columns["port1"].tobytes() == port1.tobytes()
    assert stored.own_at_us.tolist() == at_us.tolist() and not InboxRow.objects.exists()
    mark = Touch.objects.get()
    assert (mark.first_at_us, mark.last_at_us, TapHeard.objects.get().last_at_us) == (at_us[0], at_us[-1], at_us[-1])
    assert write_blocks(tap, at_us[:0], {"port1": port1[:0]}) == 0 and TapBoot.objects.count() == 1


def test_history_in_any_order_and_beside_what_is_there(db):
    tap = add_station("old", None, [NewTap("t", "two-port", "W")])[0].taps.get()
    at_us = 1_900_000_000 * S + np.arange(1000) * S
    order = np.random.default_rng(2).permutation(1000)
    for part in (order[:300], order[300:]):
        write_blocks(
            tap,
            at_us[part],
            {"port1": part.astype(float), "port2": part.astype(float)},
            boot="b",
            sequence=part,
            is_touched=False,
        )
    stored = read_readings(tap.pk, *EVER)
    assert stored.sequence.tolist() == list(range(1000)) and not Touch.objects.exists()


def test_the_door_knows_what_history_holds(sender):
    body = two_port(0, 10)
    columns = {name: np.array(values) for name, values in body["taps"]["eom-in"].items()}
    write_blocks(sender.tap(), columns.pop("at"), columns, boot="7f3a", sequence=columns.pop("sequence"))
    answer = sender.send(two_port(0, 12))
    assert (answer["stored"], answer["known"], answer["through"]) == (2, 10, {"eom-in": 11})
