"""However batches are cut, repeated, shuffled, sealed and whatever restarts: exactly the sent readings, once each."""

import random

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ingest.door.asgi import DoorApplication
from ingest.models import InboxRow, Station
from ingest.stations import NewTap, add_station
from ingest.store.seal import seal_tap
from tests.ingest.conftest import Sender

S = 1_000_000
START_US = 1_930_356_000 * S
COUNT = 60
BOOTS = ("one", "two", None)  # None: known by their time only

cut = st.tuples(st.just("send"), st.sampled_from(BOOTS), st.integers(0, COUNT - 1), st.integers(1, 25), st.integers(0, 2**16))
steps = st.lists(
    st.one_of(cut, cut, cut, st.just(("seal",)), st.just(("restart",)), st.just(("together",))), min_size=1, max_size=14
)


def reading(boot, number):
    """The one true reading of an identity; a second and a bit apart, so that slots change."""
    at_us = START_US + number * 37 * S + (0 if boot == "one" else 11 * S if boot == "two" else 23 * S)
    return {"at": at_us, "port1": 1e-3 + number * 1e-9, "port2": 1e-6 * (1 + BOOTS.index(boot)) + number * 1e-12} | (
        {} if boot is None else {"sequence": number}
    )


def batch(step):
    """A batch of some readings of one boot, shuffled, some of them twice."""
    _, boot, first, count, seed = step
    dice = random.Random(seed)
    numbers = [number for number in range(first, min(COUNT, first + count)) if dice.random() < 0.8]
    numbers += [number for number in numbers if dice.random() < 0.1]
    dice.shuffle(numbers)
    if not numbers:
        numbers = [first]
    rows = [reading(boot, number) for number in numbers]
    body = {"taps": {"eom-in": {name: [row[name] for row in rows] for name in rows[0]}}}
    return body | ({"boot": boot} if boot else {}), [(boot, number) for number in numbers]


class Run:
    """A door, and what it must hold."""

    def __init__(self):
        Station.objects.all().delete()
        station, self.key = add_station("bench", None, [NewTap("eom-in", "two-port", "W")])
        self.sender, self.sent, self.waiting = Sender(station, self.key), set(), []

    def send(self, step):
        body, identities = batch(step)
        self.waiting.append((body, identities))
        if len(self.waiting) == 1:
            self.flush()

    def flush(self):
        """Send what waits, all at once; each answer counts exactly."""
        waiting, self.waiting = self.waiting, []
        if not waiting:
            return
        responses = self.sender.together([body for body, _ in waiting])
        new = {identity for _, identities in waiting for identity in identities} - self.sent
        answers = [response.json() for response in responses]
        assert all(response.status_code == 200 for response in responses) and not any(answer["set_aside"] for answer in answers)
        assert sum(answer["stored"] for answer in answers) == len(new)
        assert sum(answer["stored"] + answer["known"] for answer in answers) == sum(len(identities) for _, identities in waiting)
        self.sent |= new
        if len(waiting) == 1:  # bodies sent at once may be committed in several groups, each with its own ``through``
            self.check_through(answers)

    def check_through(self, answers):
        for answer in answers:
            boot = answer["accepted"]["boot"]
            if boot is not None:
                held = {number for kept, number in self.sent if kept == boot}
                end = min(held)
                while end + 1 in held:
                    end += 1
                assert answer["through"] == {"eom-in": end}

    def restart(self):
        self.sender.close()
        self.sender = Sender(self.sender.station, self.key, DoorApplication())

    def check(self):
        stored = self.sender.stored()
        expected = sorted((reading(*identity) for identity in self.sent), key=lambda row: row["at"])
        assert stored.at_us.tolist() == [row["at"] for row in expected]
        for name in ("port1", "port2"):
            assert stored.column(name).tolist() == [row[name] for row in expected]
        assert stored.sequence.tolist() == [row.get("sequence", -1) for row in expected]


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow])
@given(steps=steps)
def test_any_order_ends_with_each_reading_once(transactional_db, steps):
    run = Run()
    try:
        for step in steps:
            if step[0] == "send":
                run.send(step)
            elif step[0] == "seal":
                seal_tap(run.sender.tap().pk)
            elif step[0] == "restart":
                run.restart()
            else:
                run.waiting = [batch(other) for other in steps if other[0] == "send"]
                run.flush()
            run.check()
        seal_tap(run.sender.tap().pk)
        assert not InboxRow.objects.exists()
        run.check()
    finally:
        run.sender.close()
