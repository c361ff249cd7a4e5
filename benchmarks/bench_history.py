"""A history picture of 30 days of one tap at 10 Hz, 2,000 buckets: server time against that of one day.

Server time is that of the station page's request for the picture (rights, curves, limits, alarms, temperature, JSON); the
curves alone are printed too. Wanted: at most 50 ms, and within 1.5 x of the time for one day. The 25.9 million readings go
through the real reduce and roll-up path first (this takes a minute or more and is not what is measured; its rate is printed).
"""

import sys
import time
from collections.abc import Callable
from datetime import UTC, datetime

import numpy as np

from benchmarks.lab import median, row, throw_away_lab

DAYS = int(sys.argv[1]) if len(sys.argv) > 1 else 30
DAY_US = 86_400 * 10**6
PER_DAY = 864_000
ROUNDS = 21


def timed(action: Callable[[int], None], days: int) -> float:
    """Median duration, s."""
    durations = []
    for _ in range(ROUNDS):
        began = time.perf_counter()
        action(days)
        durations.append(time.perf_counter() - began)
    return median(durations)


def _iso(at_us: int) -> str:
    return datetime.fromtimestamp(at_us / 1e6, UTC).isoformat().replace("+00:00", "Z")


def main() -> None:
    """Fill, roll up, ask."""
    with throw_away_lab():
        from django.conf import settings
        from django.test import Client

        from analysis.record.rollups import history
        from ingest.models import Tap
        from ingest.stations import NewTap, add_station
        from ingest.store.append import write_blocks
        from ingest.times import now_us
        from labmon.people.actions import add_person
        from labmon.pipeline.catch_up import catch_up

        add_station("bench", None, [NewTap("eom-in", "two-port", "mW", 0.1)])
        tap = Tap.objects.get()
        end_us = now_us() // DAY_US * DAY_US
        random, began = np.random.default_rng(3), time.perf_counter()
        for day in range(DAYS, 0, -1):
            at_us = end_us - day * DAY_US + np.arange(PER_DAY, dtype=np.int64) * 100_000
            dark = 1e-3 * (1 + 0.5 * np.sin(np.arange(PER_DAY) / 13_200)) * (1 + 0.01 * random.standard_normal(PER_DAY))
            write_blocks(tap, at_us, {"port1": 1 + 1e-3 * random.standard_normal(PER_DAY), "port2": dark},
                         boot="b1", sequence=np.arange(PER_DAY, dtype=np.int64) + (DAYS - day) * PER_DAY)
            catch_up()
        filled_s = time.perf_counter() - began

        settings.ALLOWED_HOSTS = ["testserver"]
        client = Client()
        client.force_login(add_person("manager", "manager", password="only for a benchmark"))

        def picture(days: int) -> None:
            span = f"{_iso(end_us - days * DAY_US)}/{_iso(end_us)}"
            answer = client.get("/stations/bench/taps/eom-in/history.json", {"quantity": "er_db", "points": 2000, "span": span})
            assert answer.status_code == 200 and answer.json()["series"]["mean"]

        def curves(days: int) -> None:
            found = history(tap.pk, "er_db", end_us - days * DAY_US, end_us, 2000)
            assert np.isfinite(found.mean).mean() > 0.9

        one_s, all_s, one_curves_s, all_curves_s = (timed(what, days) for what in (picture, curves) for days in (1, DAYS))
        row(f"history picture, {DAYS} days at 10 Hz, 2,000 buckets: server time", f"{all_s * 1e3:.1f} ms", "≤ 50 ms")
        row("the same / one day", f"{all_s / one_s:.2f} x ({one_s * 1e3:.1f} ms)", "≤ 1.5 x")
        row(f"  its curves alone, {DAYS} days / one day", f"{all_curves_s * 1e3:.1f} / {one_curves_s * 1e3:.1f} ms")
        row("write, reduce, judge and roll up history", f"{DAYS * PER_DAY / filled_s:,.0f} readings/s")


if __name__ == "__main__":
    main()
