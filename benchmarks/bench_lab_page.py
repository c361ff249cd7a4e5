"""The lab page with 200 stations: server time and number of queries, against 20 stations.

Wanted: at most 150 ms, and the same number of queries.
"""

import time

import numpy as np

from benchmarks.lab import median, row, throw_away_lab

ROUNDS = 15


def add_benches(first: int, last: int, owner) -> None:
    """Benches with a two-port tap, an experiment with an ER limit, and a day of readings (one each 30 s)."""
    from ingest.models import Tap
    from ingest.stations import NewTap, add_station
    from ingest.store.append import write_blocks
    from ingest.times import now_us
    from labmon.experiments.actions import create_experiment, set_limit

    random = np.random.default_rng(first)
    at_us = now_us() - np.arange(2880, 0, -1, dtype=np.int64) * 30_000_000
    for number in range(first, last):
        station, _ = add_station(f"bench-{number:03d}", f"Room {number % 8}", [NewTap("eom-in", "two-port", "mW", 30.0)])
        tap = Tap.objects.get(station=station)
        dark = 10 ** (-random.uniform(1.8, 3.2)) * (1 + 0.05 * random.standard_normal(2880))
        experiment = create_experiment(f"experiment {number}", [tap], by=owner)
        set_limit(experiment, tap, "er_db", alarm=20.0, warning=23.0, by=owner)
        write_blocks(tap, at_us, {"port1": np.full(2880, 1.0), "port2": dark}, boot="b1", sequence=np.arange(2880))


def timed_page(client) -> tuple[float, int, int]:
    """Median server time in s, queries, and bytes of the page."""
    from django.db import connection
    from django.test.utils import CaptureQueriesContext

    durations = []
    for _ in range(ROUNDS):
        began = time.perf_counter()
        answer = client.get("/")
        durations.append(time.perf_counter() - began)
        assert answer.status_code == 200
    with CaptureQueriesContext(connection, ) as queries:
        client.get("/")
    return median(durations), len(queries), len(answer.content)


def main() -> None:
    """20 stations, then 200."""
    with throw_away_lab():
        from django.conf import settings
        from django.test import Client

        from labmon.people.actions import add_person
        from labmon.pipeline.catch_up import catch_up

        settings.ALLOWED_HOSTS = ["testserver"]
        manager = add_person("manager", "manager", password="only for a benchmark")
        client = Client()
        client.force_login(manager)
        add_benches(0, 20, manager)
        catch_up()
        few_s, few_queries, _ = timed_page(client)
        add_benches(20, 200, manager)
        catch_up()
        many_s, many_queries, many_bytes = timed_page(client)
        row("lab page with 200 stations, server time",
            f"{many_s * 1e3:.0f} ms ({few_s * 1e3:.0f} ms with 20; {many_bytes / 1e3:.0f} kB)", "≤ 150 ms")
        row("lab page: queries with 20 / with 200 stations", f"{few_queries} / {many_queries}", "equal")


if __name__ == "__main__":
    main()
