"""A bench in data time: readings of a wanted ER, stored as they come, judged on a clock of the test's own."""

from dataclasses import dataclass

import numpy as np

from ingest.models import Tap
from labmon.alarms.models import Alarm
from labmon.pipeline.process import process_touched
from tests.factories import NOON_US, store_readings

S = 1_000_000


def ports_of(er_db):
    """Port powers, W, of light with this extinction ratio (1 mW in the wanted port)."""
    return {"port1": np.full(np.shape(er_db), 1e-3), "port2": 1e-3 * 10 ** (-np.asarray(er_db) / 10)}


@dataclass
class Feed:
    """Readings of one tap: ER at whole seconds (or faster) from noon on."""

    tap: Tap
    er_db: np.ndarray
    step_us: int = S

    @property
    def at_us(self):
        return NOON_US + np.arange(len(self.er_db)) * self.step_us

    def send(self, index, *, now_us=None, is_processed=True):
        """Store the chosen readings as heard now (else each at its own time), and judge."""
        index = np.atleast_1d(np.asarray(index))
        at_us = self.at_us[index]
        columns = {name: values[index] for name, values in ports_of(self.er_db).items()}
        store_readings(
            self.tap,
            at_us,
            arrival_us=at_us if now_us is None else np.full(len(at_us), now_us),
            sequence=index,
            boot="b",
            **columns,
        )
        if is_processed:
            return process_touched(now_us=int(at_us.max()) + 100_000 if now_us is None else now_us)
        return None

    def finish(self):
        """Long after the last reading: every second is complete."""
        return process_touched(now_us=int(self.at_us[-1]) + 3600 * S)


def episodes(limit):
    """(raised, returned, level, worst value) of a limit's alarms that stand, seconds from noon."""

    def seconds(at):
        return None if at is None else round((at.timestamp() * S - NOON_US) / S, 6)

    rows = Alarm.objects.filter(limit=limit, is_withdrawn=False).order_by("raised_at")
    return [
        (
            seconds(row.raised_at),
            seconds(row.alarm_at),
            seconds(row.returned_at),
            row.level,
            None if row.value is None else round(row.value, 6),
        )
        for row in rows
    ]
