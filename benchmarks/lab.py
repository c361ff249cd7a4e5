"""A throw-away lab on real, durable engines for benchmarks, and the counters they share."""

import os
import shutil
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

CLOCK_TICKS = os.sysconf("SC_CLK_TCK")


@contextmanager
def throw_away_lab() -> Iterator[Path]:
    """Start PostgreSQL (commits durable, as in a real lab) and Valkey in a temporary folder; set up Django; migrate."""
    from labmon.engines.folder import DataFolder
    from labmon.engines.postgres import EmbeddedPostgres
    from labmon.engines.valkey import EmbeddedValkey

    folder = DataFolder(Path(tempfile.mkdtemp(prefix="lmb-", dir="/tmp")))
    folder.make()
    engines = [EmbeddedPostgres(folder), EmbeddedValkey(folder)]
    try:
        for engine in engines:
            engine.start()
        os.environ |= {"LABMON_DATABASE_URL": engines[0].url, "LABMON_BROKER_URL": engines[1].url,
                       "LABMON_DATA": str(folder.path), "DJANGO_SETTINGS_MODULE": "labmon.settings",
                       "LABMON_LOG_LEVEL": "WARNING"}
        import django
        from django.core.management import call_command

        django.setup()
        call_command("migrate", verbosity=0)
        call_command("collectstatic", verbosity=0, interactive=False)
        yield folder.path
    finally:
        for engine in reversed(engines):
            engine.stop()
        shutil.rmtree(folder.path, ignore_errors=True)


def cpu_s(pids: list[int]) -> float:
    """CPU time of processes and their waited-for children so far, s; processes that are gone count nothing."""
    total = 0
    for pid in pids:
        try:
            fields = Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()
        except FileNotFoundError:
            continue
        total += sum(int(field) for field in fields[11:15])
    return total / CLOCK_TICKS


def descendants(pid: int) -> list[int]:
    """The process and all below it."""
    found = [pid]
    for one in found:
        for task in Path(f"/proc/{one}/task").glob("*/children"):
            try:
                found += [int(child) for child in task.read_text().split()]
            except FileNotFoundError:
                continue
    return found


def median(values: list[float]) -> float:
    """The middle value."""
    return sorted(values)[len(values) // 2]


def best_of(times: int, action) -> float:
    """Shortest duration of ``action`` in ``times`` runs, s."""
    durations = []
    for _ in range(times):
        began = time.perf_counter()
        action()
        durations.append(time.perf_counter() - began)
    return min(durations)


def row(what: str, figure: str, wanted: str = "") -> None:
    """One line of the table that `make bench` prints."""
    print(f"| {what} | {figure} | {wanted} |", file=sys.stdout, flush=True)
