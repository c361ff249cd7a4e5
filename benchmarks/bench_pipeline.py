"""Judging and rolling up beside live readings: a real worker and beat, readings stored as the door stores them.

Wanted: 200 taps x 10 Hz, and 1,000 taps x 1 Hz, on half a core or less, judged within 2 s.
`python -m benchmarks.bench_pipeline 300` runs five minutes each (default 30 s).
"""

import os
import subprocess
import sys
import threading
import time
from pathlib import Path
from zlib import crc32

import numpy as np

from benchmarks.lab import cpu_s, descendants, median, row, throw_away_lab

PARTS_A_SECOND = 10
SETTLE_S = 8.0
LEAST_PROCESSES = 7  # two workers, their two each, beat


def make_taps(taps: int, rate_hz: int) -> list[tuple[int, int]]:
    """(tap id, boot id) of new taps, each watched by a limit on ER."""
    from ingest.models import Station, StationBoot, Tap, TapBoot
    from labmon.experiments.actions import create_experiment, set_limit

    made = []
    for number in range(taps):
        station = Station.objects.create(name=f"b{rate_hz}-{number:04d}")
        tap = Tap.objects.create(station=station, name="out", kind="two-port", unit="W")
        set_limit(create_experiment(f"{station.name} watched", [tap], by=None), tap, "er_db", alarm=20.0, warning=23.0, by=None)
        boot = StationBoot.objects.create(station=station, boot="b", first_arrival_us=0, last_arrival_us=0)
        made.append((tap.pk, TapBoot.objects.create(tap=tap, station_boot=boot, first_at_us=0, last_at_us=0).pk))
    return made


class Feeder(threading.Thread):
    """Stores one-second batches of all taps, a tenth of the taps each tenth of a second, and gives the hint."""

    def __init__(self, taps: list[tuple[int, int]], rate_hz: int) -> None:
        super().__init__(daemon=True)
        self.taps, self.rate_hz, self.stop, self.stored = taps, rate_hz, threading.Event(), 0
        self.random = np.random.default_rng(1)

    def run(self) -> None:
        from django.db import connection

        from ingest.announce import announce

        part, due = 0, time.monotonic()
        while not self.stop.is_set():
            self._store(self.taps[part % PARTS_A_SECOND :: PARTS_A_SECOND], part // PARTS_A_SECOND)
            announce()
            part += 1
            due += 1.0 / PARTS_A_SECOND
            self.stop.wait(max(due - time.monotonic(), 0.0))
        connection.close()

    def _store(self, taps: list[tuple[int, int]], second: int) -> None:
        from django.db import connection, transaction

        from ingest.store.codec import pack_even_batch
        from ingest.times import now_us

        arrival_us, count = now_us(), self.rate_hz
        at_us = arrival_us - np.arange(count, 0, -1, dtype=np.int64) * (1_000_000 // count)
        bodies = [
            pack_even_batch(at_us, ("port1", "port2", "temperature_c"), self._values(count), second * count, arrival_us)
            for _ in taps
        ]
        ids, first, last = [tap for tap, _ in taps], int(at_us[0]), int(at_us[-1])
        with transaction.atomic(), connection.cursor() as cursor:
            cursor.execute(
                """
                INSERT INTO ingest_inboxrow (tap_id, tap_boot_id, first_sequence, last_sequence,
                    first_at_us, last_at_us, count, arrival_us, crc, body)
                SELECT tap, boot, %s, %s, %s, %s, %s, %s, crc, body
                    FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[], %s::bytea[]) AS t(tap, boot, crc, body)""",
                [
                    second * count,
                    (second + 1) * count - 1,
                    first,
                    last,
                    count,
                    arrival_us,
                    ids,
                    [boot for _, boot in taps],
                    [crc32(body) for body in bodies],
                    bodies,
                ],
            )
            cursor.execute(
                "INSERT INTO ingest_touch (tap_id, first_at_us, last_at_us, arrival_us) "
                "SELECT tap, %s, %s, %s FROM unnest(%s::bigint[]) AS t(tap)",
                [first, last, arrival_us, ids],
            )
            cursor.execute(
                """
                INSERT INTO ingest_tapheard (tap_id, last_arrival_us, last_at_us)
                    SELECT tap, %s, %s FROM unnest(%s::bigint[]) AS t(tap)
                ON CONFLICT (tap_id) DO UPDATE SET last_arrival_us = excluded.last_arrival_us,
                    last_at_us = excluded.last_at_us""",
                [arrival_us, last, ids],
            )
        self.stored += count * len(taps)

    def _values(self, count: int) -> np.ndarray:
        noise = self.random.standard_normal((2, count))
        return np.stack([1e-3 * (1 + 0.01 * noise[0]), 1e-6 * (1 + 0.1 * noise[1]), np.full(count, 21.0)])


def oldest_mark_s() -> float:
    """How long the longest waiting mark waits, s: the lag between commit and judgement, seen from outside."""
    from django.db import connection

    from ingest.times import now_us

    with connection.cursor() as cursor:
        cursor.execute("SELECT min(arrival_us) FROM ingest_touch")
        since_us = cursor.fetchone()[0]
    return 0.0 if since_us is None else (now_us() - since_us) / 1e6


def measure(taps: int, rate_hz: int, for_s: float, runs: list[int], postmaster: int) -> None:
    """Feed, wait until it runs smoothly, then count."""
    feeder = Feeder(make_taps(taps, rate_hz), rate_hz)
    feeder.start()
    time.sleep(SETTLE_S)
    began, stored = time.monotonic(), feeder.stored
    database, workers = descendants(postmaster), [pid for run in runs for pid in descendants(run)]
    assert len(workers) >= LEAST_PROCESSES, "the worker has not started its processes"
    pipeline_s, database_s = cpu_s(workers), cpu_s(database)
    lags = []
    while time.monotonic() - began < for_s:
        lags.append(oldest_mark_s())
        time.sleep(0.1)
    took_s = time.monotonic() - began
    pipeline_s, database_s = cpu_s(workers) - pipeline_s, cpu_s(database) - database_s
    rate = (feeder.stored - stored) / took_s
    feeder.stop.set()
    feeder.join()
    row(
        f"{taps} taps x {rate_hz} Hz for {took_s:.0f} s ({rate:.0f} readings/s): worker and beat",
        f"{pipeline_s / took_s:.2f} cores",
        "<= 0.5",
    )
    row("  database meanwhile, the feeder's own writes included", f"{database_s / took_s:.2f} cores")
    row("  longest waiting mark, median", f"{median(lags):.2f} s")
    row("  longest waiting mark, 99 %", f"{sorted(lags)[int(0.99 * len(lags))]:.2f} s", "< 2 s")


def main() -> None:
    """Both shapes."""
    for_s = float(sys.argv[1]) if len(sys.argv) > 1 else 30.0
    with throw_away_lab() as folder:
        celery = [sys.executable, "-m", "celery", "-A", "labmon", "--quiet"]
        runs = [
            *(subprocess.Popen([sys.executable, "-m", "labmon.worker", lane, "--log-level", "ERROR"], env=os.environ.copy())
              for lane in ("prompt", "long")),
            subprocess.Popen([*celery, "beat", "--schedule", str(folder / "beat"), "--loglevel", "ERROR"], env=os.environ.copy()),
        ]
        try:
            time.sleep(4)
            postmaster = next(pid for pid in map(int, filter(str.isdigit, os.listdir("/proc"))) if _is_postgres(pid, folder))
            for taps, rate_hz in ((200, 10), (1000, 1)):
                measure(taps, rate_hz, for_s, [run.pid for run in runs], postmaster)
        finally:
            for run in runs:
                run.terminate()
            for run in runs:
                run.wait(20)


def _is_postgres(pid: int, folder: Path) -> bool:
    """True for the postmaster of this lab: its children count with it."""
    try:
        words = Path(f"/proc/{pid}/cmdline").read_bytes().split(b"\0")
    except OSError:
        return False
    return any(word.endswith(b"postgres") for word in words[:1]) and any(str(folder).encode() in word for word in words)


if __name__ == "__main__":
    main()
