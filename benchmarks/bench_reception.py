"""Reception through HTTP including the commit, against COPY + on-conflict writing the same readings as keyed rows.

200 taps x 10 Hz in one-second batches: 20 stations of 10 taps. Wanted: JSON of 100 readings at least 0.5 x the
reference, MessagePack of 1,000 at least 1.5 x; p99 of the acknowledgement at 50,000 readings/s at most 250 ms.
The client runs beside the server on the same cores.
"""

import asyncio
import time

import numpy as np

from benchmarks.lab import median, row, throw_away_lab
from benchmarks.sender import COLUMNS, Batch, Run, make_batch, send_all
from benchmarks.web import web_process

STATIONS, TAPS, ROUNDS = 20, 10, 3
REFERENCE_SECONDS = 25


def make_stations() -> list[tuple[str, list[str]]]:
    """Keys and tap names of the stations."""
    from ingest.stations import NewTap, add_station

    names = [f"tap-{number}" for number in range(TAPS)]
    return [(add_station(f"bench-{number}", None, [NewTap(name, "two-port", "W") for name in names])[1], names)
            for number in range(STATIONS)]


def lanes_of(
    stations: list[tuple[str, list[str]]], each: int, batches: int, first: int, *, as_msgpack: bool
) -> list[list[Batch]]:
    """Per station, ``batches`` requests numbered from ``first``."""
    start_us = (time.time_ns() // 1000) - 3600 * 10**6
    return [[make_batch(key, taps, each, first + number, start_us, 100, as_msgpack=as_msgpack) for number in range(batches)]
            for key, taps in stations]


def reference_rate() -> float:
    """Readings per second that one psycopg connection writes as keyed rows, 2,000 a transaction, repeat-safe."""
    import psycopg
    from django.conf import settings

    from ingest.database import conninfo_of

    columns = ", ".join(f"{name} float8" for name in COLUMNS)
    names = "tap, boot, sequence, at_us, " + ", ".join(COLUMNS)
    random = np.random.default_rng(7)
    with psycopg.connect(**conninfo_of(settings.DATABASES["default"])) as db:
        db.execute("DROP TABLE IF EXISTS keyed")
        db.execute(f"CREATE TABLE keyed (tap int, boot int, sequence bigint, at_us bigint, {columns}, "
                   "PRIMARY KEY (tap, boot, sequence))")
        db.execute(f"CREATE TEMP TABLE fresh (tap int, boot int, sequence bigint, at_us bigint, {columns})")
        db.commit()
        seconds = []
        for second in range(REFERENCE_SECONDS):
            values = random.standard_normal((2000, len(COLUMNS))).tolist()
            seconds.append([(i // 10, 1, second * 10 + i % 10, second * 10**6 + i % 10, *values[i]) for i in range(2000)])
        began = time.perf_counter()
        for rows in seconds:
            with db.cursor() as cursor:
                with cursor.copy(f"COPY fresh ({names}) FROM STDIN (FORMAT BINARY)") as copy:
                    copy.set_types(["int4", "int4", "int8", "int8", *["float8"] * len(COLUMNS)])
                    for values in rows:
                        copy.write_row(values)
                cursor.execute(f"INSERT INTO keyed SELECT {names} FROM fresh ON CONFLICT DO NOTHING")
                cursor.execute("TRUNCATE fresh")
            db.commit()
        return REFERENCE_SECONDS * 2000 / (time.perf_counter() - began)


def checked(run: Run) -> Run:
    """The run, if every answer was 200."""
    assert not run.bad, f"answers other than 200: {run.bad}"
    return run


def main() -> None:
    """Reference, JSON and MessagePack in turn, three rounds; then the paced run."""
    with throw_away_lab():
        stations = make_stations()
        with web_process() as (port, _):
            reference, as_json, as_msgpack, first = [], [], [], 0
            for _ in range(ROUNDS):
                reference.append(reference_rate())
                lanes = lanes_of(stations, 10, 150, first, as_msgpack=False)
                run = checked(asyncio.run(send_all(port, lanes)))
                as_json.append(run.readings / run.duration_s)
                lanes = lanes_of(stations, 100, 40, first // 10 + 5000, as_msgpack=True)
                run = checked(asyncio.run(send_all(port, lanes)))
                as_msgpack.append(run.readings / run.duration_s)
                first += 2000
            row("reception over HTTP, JSON, 100 readings a request / COPY + on-conflict",
                f"{median(as_json) / median(reference):.2f} x ({median(as_json):,.0f} / {median(reference):,.0f} readings/s)",
                "≥ 0.5 x")
            row("reception over HTTP, MessagePack, 1,000 a request / the same",
                f"{median(as_msgpack) / median(reference):.2f} x ({median(as_msgpack):,.0f} readings/s)", "≥ 1.5 x")
            lanes = lanes_of(stations, 10, 500, 10_000, as_msgpack=False)
            run = checked(asyncio.run(send_all(port, lanes, every_s=STATIONS * 100 / 50_000)))
            row("acknowledgement at 50,000 readings/s (JSON, 100 a request): p50 / p99",
                f"{run.percentile_ms(0.5):.0f} / {run.percentile_ms(0.99):.0f} ms "
                f"at {run.readings / run.duration_s:,.0f} readings/s",
                "p99 ≤ 250 ms")


if __name__ == "__main__":
    main()
