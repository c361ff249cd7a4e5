"""Clearance of one bench with 100 nights from the database, and the nightly back-test of 100 benches x 100 nights.

Wanted: at most 1 s a clearance (with its page), at most 2 min for the back-test on two cores. One two-port and one Stokes bench
get 101 days of readings through the real reduce and roll-up path; their rollups are then copied to 98 more, so that each costs
what a bench costs. The reference is the same history read from raw readings (one bench, its last ten nights), in the same run.
"""

import time
from datetime import UTC, datetime, timedelta

import numpy as np

from benchmarks.lab import median, row, throw_away_lab

DAYS, BENCHES, ROUNDS = 101, 100, 5
STEP_S, S, DAY_S = 20, 10**6, 86_400


def wandering(random: np.random.Generator, count: int) -> np.ndarray:
    """Angles in two directions, degrees, shape (count, 2): a swing with the room, a walk that is pulled back."""
    swing = 2.0 * np.sin(2 * np.pi * np.arange(count) * STEP_S / 1320.0)
    steps = random.normal(0, 0.02, (count, 2))
    walk = np.empty((count, 2))
    at = np.zeros(2)
    for number in range(count):
        at = 0.9995 * at + steps[number]
        walk[number] = at
    walk[:, 0] += swing
    return walk + random.normal(0, 0.05, (count, 2))


def main() -> None:
    """Fill, copy, ask."""
    with throw_away_lab():
        from django.conf import settings
        from django.db import connection
        from django.test import Client

        from analysis.record.calibrations import new_version
        from analysis.record.reduce_span import find_samples
        from ingest.models import Tap
        from ingest.stations import NewTap, add_station
        from ingest.store.append import write_blocks
        from ingest.times import at_of, now_us, us_of
        from labmon.clearance.ask import checked_question, clearance_of
        from labmon.clearance.back_tests import begin_nightly, walk_due
        from labmon.clearance.models import BackTestPass
        from labmon.experiments.models import Experiment, Limit, LimitVersion
        from labmon.people.actions import add_person
        from labmon.pipeline.catch_up import catch_up

        random, began = np.random.default_rng(5), time.perf_counter()
        end_us = now_us() // S * S
        first_us = end_us - DAYS * DAY_S * S
        at_us = np.arange(first_us, end_us, STEP_S * S, dtype=np.int64)
        for number in range(BENCHES):
            kind = "two-port" if number % 2 == 0 else "stokes"
            add_station(f"b{number:03}", None, [NewTap("in", kind, "W", float(STEP_S))])
        taps = list(Tap.objects.order_by("station__name"))
        for tap in taps[:2]:
            plane = np.radians(wandering(random, len(at_us)))
            angle = np.linalg.norm(plane, axis=1)
            if tap.kind == "two-port":
                columns = {"port1": 1e-3 * np.cos(angle / 2) ** 2, "port2": 1e-3 * np.sin(angle / 2) ** 2}
            else:
                new_version(tap, at_of(first_us - S), {"wanted_state": [1.0, 0.0, 0.0]})
                sideways = 1e-3 * np.sinc(angle / np.pi)[:, None] * plane
                columns = {"s0": np.full(len(angle), 1e-3), "s1": 1e-3 * np.cos(angle), "s2": sideways[:, 0],
                           "s3": sideways[:, 1]}
            write_blocks(tap, at_us, columns, boot="b1", sequence=np.arange(len(at_us)))
        catch_up(end_us + S)
        with connection.cursor() as cursor:
            for number, tap in enumerate(taps[2:], 2):
                source = taps[number % 2].pk
                for table, columns in (("analysis_rolluppage", "level_s, page_us, layout, count, ends, body"),
                                       ("analysis_rolluprow", "level_s, bucket_us, body")):
                    cursor.execute(f"INSERT INTO {table} (tap_id, {columns}) SELECT %s, {columns} FROM {table} WHERE tap_id = %s",
                                   [tap.pk, source])
                cursor.execute("INSERT INTO ingest_tapboot (tap_id, station_boot_id, first_at_us, last_at_us, held) "
                               "SELECT %s, station_boot_id, first_at_us, last_at_us, held FROM ingest_tapboot WHERE tap_id = %s",
                               [tap.pk, source])
                if tap.kind == "stokes":
                    new_version(tap, at_of(first_us - S), {"wanted_state": [1.0, 0.0, 0.0]})
        for tap in taps:
            experiment = Experiment.objects.create(name=f"experiment {tap.station.name}")
            experiment.taps.add(tap)
            limit = Limit.objects.create(experiment=experiment, tap=tap, quantity="angle_deg")
            LimitVersion.objects.create(limit=limit, number=1, valid_from=at_of(first_us), alarm=11.42)
        row("(fill, reduce, roll up, copy)", f"{time.perf_counter() - began:.0f} s")

        settings.ALLOWED_HOSTS = ["testserver"]
        client = Client()
        client.force_login(add_person("manager", "manager", password="only for a benchmark"))
        for tap in taps[:2]:
            experiment = Experiment.objects.get(taps=tap)
            question = checked_question(end_us, 43_200.0, 0.0, end_us)
            answer = clearance_of(experiment, question)
            spent_s, page_s = [], []
            for _ in range(ROUNDS):
                began = time.perf_counter()
                clearance_of(experiment, question)
                spent_s.append(time.perf_counter() - began)
                began = time.perf_counter()
                page = client.get(f"/experiments/{experiment.pk}/clearance/", {"length_h": "12"})
                page_s.append(time.perf_counter() - began)
            began = time.perf_counter()
            find_samples(tap, end_us - 10 * DAY_S * S, end_us)
            raw_s = time.perf_counter() - began
            counted = answer.limits[0].clearance
            row(f"clearance from {len(counted.counted) + len(counted.set_aside)} nights, {tap.kind} ({answer.together.held} of "
                f"{answer.together.count} held): answer / with its page ({len(page.content) / 1024:.0f} kB)",
                f"{median(spent_s) * 1e3:.0f} ms / {median(page_s) * 1e3:.0f} ms (ten nights' raw readings alone: "
                f"{raw_s * 1e3:.0f} ms)", f"≤ 1 s, met: {'yes' if median(page_s) <= 1.0 else 'no'}")

        began, now = time.perf_counter(), datetime.now(UTC)
        begin_nightly(now)
        walked = walk_due(now + timedelta(seconds=1))
        spent = time.perf_counter() - began
        facts = BackTestPass.objects.get().facts
        row(f"back-test of {walked} benches x {DAYS - 1} nights, one worker on one core ({facts['windows']} nights told, "
            f"{facts['cleared']} cleared)", f"{spent:.0f} s", f"≤ 120 s on two cores, met: {'yes' if spent <= 120 else 'no'}")
        assert walked == BENCHES and us_of(now)


if __name__ == "__main__":
    main()
