"""The same noisy readings, sent to the door in order, shuffled, repeated, cut anew or late by minutes: the same episodes
(CONTRACT 5)."""

from datetime import timedelta

import numpy as np
import pytest

from ingest.models import Touch
from ingest.stations import NewTap, add_station
from ingest.store.seal import seal_inbox
from labmon.alarms.models import Alarm
from labmon.experiments.actions import set_limit
from labmon.pipeline.process import process_touched
from tests.factories import NOON, NOON_US, make_experiment
from tests.ingest.conftest import Sender
from tests.labmon.pipeline.lab import S, episodes, ports_of

pytestmark = pytest.mark.django_db(transaction=True)

#: dB and seconds; 13 minutes, so that a checkpoint (each ten minutes) lies within an open episode.
LIGHT = ((30, 50), (22, 60), (18, 70), (30, 110), (19, 25), (30, 60), (21, 150), (18, 120), (30, 100), (22.2, 35))


@pytest.fixture(autouse=True)
def evening(monkeypatch):
    """Limits are set in the evening of the day that is judged."""
    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON + timedelta(hours=8))


def _noisy_er_db():
    generator = np.random.default_rng(7)
    levels = np.concatenate([np.full(seconds, er_db, dtype=float) for er_db, seconds in LIGHT])
    return levels + generator.normal(0.0, 0.2, len(levels))


ER_DB = _noisy_er_db()
AT_US = NOON_US + np.arange(len(ER_DB)) * S
LAST_US = int(AT_US[-1])


def _worst(from_s, until_s):
    return round(float(ER_DB[from_s:until_s].min()), 6)


#: By hand: (raised, alarm since, returned, level, worst while open), seconds from noon. Below the warning limit from 50 on
#: and below the alarm limit from 110 on, clear from 180 on; 25 s of 19 dB are shorter than the delay; the rest likewise.
EPISODES = [
    (80.0, 140.0, 200.0, "alarm", _worst(80, 200)),
    (405.0, 555.0, 665.0, "alarm", _worst(405, 665)),
    (775.0, None, None, "warning", _worst(775, 780)),
]


def _at_once(generator):
    return [np.arange(len(ER_DB))]


def _in_order(generator):
    return np.split(np.arange(len(ER_DB)), np.arange(10, len(ER_DB), 10))


def _shuffled(generator):
    batches = np.split(np.arange(len(ER_DB)), np.sort(generator.choice(np.arange(1, len(ER_DB)), 40, replace=False)))
    return [batches[number] for number in generator.permutation(len(batches))]


def _repeated_and_cut_anew(generator):
    batches = []
    for start in range(0, len(ER_DB), 15):
        first = max(start - int(generator.integers(0, 40)), 0)
        batches.append(np.arange(first, min(start + 15, len(ER_DB))))
    return batches


def _late_by_minutes(generator):
    late = np.zeros(len(ER_DB), dtype=bool)
    for start in generator.choice(len(ER_DB) - 60, 5, replace=False):
        late[start : start + int(generator.integers(5, 60))] = True
    prompt = np.array_split(np.flatnonzero(~late), 60)
    is_early = np.arange(len(ER_DB)) < 400
    early, rest = np.flatnonzero(late & is_early), np.flatnonzero(late & ~is_early)
    return [batch for batch in (*prompt[:40], *np.array_split(early, 3), *prompt[40:], rest) if len(batch)]


class Bench:
    """A station at the real door, on a clock of the test's own, with one watched tap."""

    def __init__(self, monkeypatch):
        station, key = add_station("bench-1", None, [NewTap("eom-in", "two-port", "W", 1.0)])
        self.sender, self.tap, self.now_us = Sender(station, key), station.taps.get(), NOON_US
        monkeypatch.setattr("ingest.door.asgi.now_us", lambda: self.now_us)
        delays = {"on_delay_s": 30.0, "off_delay_s": 20.0, "deadband": 1.0}
        experiment = make_experiment(self.tap)
        self.limit = set_limit(experiment, self.tap, "er_db", alarm=20.0, warning=23.0, valid_from=NOON, by=None, **delays).limit
        process_touched(now_us=NOON_US)

    def send(self, batch, now_us):
        """The batch's readings, arriving now; the door's answer."""
        self.now_us = now_us
        ports = {name: values[batch].tolist() for name, values in ports_of(ER_DB).items()}
        columns = {"sequence": batch.tolist(), "at": AT_US[batch].tolist()} | ports
        return self.sender.send({"boot": "b", "now": {"at": now_us}, "taps": {"eom-in": columns}})

    def finish(self):
        """Long after the last reading everything is judged; the episodes."""
        for later_s in (60, 120):
            process_touched(now_us=LAST_US + later_s * S)
        assert not Touch.objects.exists()
        return episodes(self.limit)

    def told(self):
        return set(Alarm.objects.filter(limit=self.limit, is_late=False).values_list("pk", flat=True))


@pytest.fixture
def bench(monkeypatch):
    made = Bench(monkeypatch)
    yield made
    made.sender.close()


@pytest.mark.parametrize("seed", range(2))
@pytest.mark.parametrize("way", [_at_once, _in_order, _shuffled, _repeated_and_cut_anew, _late_by_minutes])
def test_same_readings_same_episodes(bench, way, seed):
    generator = np.random.default_rng(seed)
    told, known = set(), 0
    for number, batch in enumerate(way(generator)):
        now_us = max(bench.now_us, int(AT_US[batch].max()) + 200_000)
        known += bench.send(batch, now_us)["known"]
        if way is _in_order or generator.random() < 0.7:
            process_touched(now_us=now_us)
        told |= bench.told()
        if number % 17 == 16:
            seal_inbox()
    assert bench.finish() == EPISODES
    assert told <= set(Alarm.objects.values_list("pk", flat=True)), "a told alarm is never deleted"
    assert bench.sender.stored().sequence.tolist() == list(range(len(ER_DB)))
    assert (known > 0) == (way is _repeated_and_cut_anew)
