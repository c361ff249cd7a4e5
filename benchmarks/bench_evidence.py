"""Evidence of a 14 h run at 10 Hz: the ledger, the package, and its check by the command and by the script within.

Wanted: the package in at most 10 s, all agreeing to the second, at a memory that does not grow with the run.
"""

import resource
import subprocess
import sys
import tempfile
import time
import tracemalloc
import zipfile
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np

from benchmarks.lab import row, throw_away_lab

HOURS, RATE_HZ = 14, 10
START = datetime(2024, 3, 4, 18, tzinfo=UTC)


def make_run(hours: int):
    """A run with readings of its own bench: drift, excursions, a gap, clipped minutes."""
    from ingest.models import Tap
    from ingest.stations import NewTap, add_station
    from ingest.store.append import write_blocks
    from ingest.times import us_of
    from labmon.benches.calibration import set_calibration
    from labmon.experiments.actions import create_experiment
    from labmon.experiments.models import Limit, LimitVersion
    from labmon.people.models import Person
    from labmon.runs.models import Run, RunLimit, RunTap

    owner = Person.objects.filter(username="owner").first() or Person.objects.create_user("owner", role="manager")
    name = f"bench-{hours}"
    station, _key = add_station(name, None, [NewTap("in", "two-port", "W")])
    tap = Tap.objects.get(station=station)
    set_calibration(tap, START - timedelta(days=1), {"zero2": 1e-8, "floor1": 1e-9, "floor2": 1e-9}, by=owner, reason="")
    random, count = np.random.default_rng(hours), hours * 3600 * RATE_HZ
    at_s = np.arange(count) / RATE_HZ
    er_db = 25 + 3 * np.sin(at_s / 1300) + 0.2 * random.standard_normal(count) - 6 * (np.abs(at_s % 9000 - 4000) < 60)
    keep = np.abs(at_s - 5 * 3600) > 300
    port1 = 1e-3 * (1 + 0.003 * random.standard_normal(count))
    clipped = (np.abs(at_s - 8 * 3600) < 200).astype(float)
    columns = {"port1": port1, "port2": port1 / 10 ** (er_db / 10), "clipped": clipped,
               "temperature_c": 21 + 0.1 * np.sin(at_s / 700)}
    at_us = us_of(START) + np.round(at_s * 1e6).astype(np.int64)
    write_blocks(tap, at_us[keep], {key: values[keep] for key, values in columns.items()}, boot="7f3a9c21",
                 sequence=np.flatnonzero(keep), arrival_us=at_us[keep] + 700_000)
    experiment = create_experiment(f"trap {hours}", [tap], by=owner)
    limit = Limit.objects.create(experiment=experiment, tap=tap, quantity="er_db")
    version = LimitVersion.objects.create(limit=limit, number=1, valid_from=START - timedelta(days=1), alarm=20.0)
    run = Run.objects.create(experiment=experiment, name=f"{hours} h", starts_at=START, ends_at=START + timedelta(hours=hours),
                             limits_noted_at=START)
    RunTap.objects.create(run=run, tap=tap)
    RunLimit.objects.create(run=run, limit_version=version, from_at=START)
    return run, int(keep.sum())


def measure(hours: int) -> None:
    """Ledger, package and checks of one run."""
    from labmon.evidence.files import place_of
    from labmon.evidence.making import make_evidence
    from labmon.evidence.models import RunEvidence
    from labmon.evidence.verify import verify_file
    from labmon.runs.ledgers import ask_ledger
    from labmon.runs.making import make_ledger

    run, rows = make_run(hours)
    ledger = ask_ledger(run, by=None)
    began = time.perf_counter()
    make_ledger(ledger)
    ledger_s = time.perf_counter() - began
    ledger.refresh_from_db()
    evidence = RunEvidence.objects.create(run=run, ledger=ledger, number=1, rows_total=rows)
    began = time.perf_counter()
    make_evidence(evidence)
    package_s = time.perf_counter() - began
    evidence.refresh_from_db()
    began = time.perf_counter()
    found = verify_file(place_of(evidence))
    verify_s = time.perf_counter() - began
    with tempfile.TemporaryDirectory() as folder:
        with zipfile.ZipFile(place_of(evidence)) as package:
            package.extractall(folder)
        began = time.perf_counter()
        done = subprocess.run([sys.executable, next(Path(folder).iterdir()) / "recompute.py"], capture_output=True, text=True)
        script_s = time.perf_counter() - began
    row(f"{hours} h at {RATE_HZ} Hz", f"{rows} readings, {evidence.size / 1e6:.1f} MB")
    row("  ledger made in", f"{ledger_s:.2f} s")
    row("  package written in (PDF, digest and fsync with it)", f"{package_s:.2f} s (wanted: 14 h in 10 s)")
    row("  verified in (digests, ledger, CSV against Parquet)", f"{verify_s:.2f} s, {len(found.faults)} differences")
    row("  script within, alone", f"{script_s:.2f} s, {done.stdout.strip().splitlines()[-1]}")
    evidence.delete()


def peak_mib(hours: int) -> float:
    """What Python and numpy hold at most while a package is written, MiB."""
    from django.utils import timezone

    from labmon.evidence.package import Order, write_evidence
    from labmon.runs.models import Run

    ledger = Run.objects.get(name=f"{hours} h").ledgers.get()
    with tempfile.TemporaryFile() as file:
        tracemalloc.start()
        write_evidence(file, Order(ledger, 2, timezone.now()))
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
    return peak / 2**20


if __name__ == "__main__":
    with throw_away_lab():
        for each in (2, HOURS):
            measure(each)
        row("most memory traced while writing", ", ".join(f"{each} h: {peak_mib(each):.0f} MiB" for each in (2, HOURS)))
        row("this process at most", f"{resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MiB")
