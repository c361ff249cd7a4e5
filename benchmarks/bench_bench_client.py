"""A day without network: the bench client drains its spool (2 taps at 10 Hz for 24 h, 1.73 million readings) to the real door.

Reference in the same run: the same number of columns in bodies made beforehand, sent by a lean client over one connection.
Wanted: a day within five minutes, at least a tenth of the reference, at most 100 MB of memory, and every reading once.
"""

import asyncio
import re
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from benchmarks.lab import cpu_s, row, throw_away_lab
from benchmarks.sender import make_batch, send_all
from benchmarks.web import web_process

ROOT = Path(__file__).resolve().parents[1]
BENCH = ROOT / "clients" / "bench"
TAPS = ("eom-in", "eom-out")
PER_TAP = 24 * 3600 * 10
AT_ONCE = 5_000
REFERENCE_BATCHES = 60


def fill(path: Path) -> float:
    """A day's readings into a spool; seconds it took."""
    sys.path.insert(0, str(BENCH))
    from labmon_bench.reading import Reading
    from labmon_bench.store import Store

    began = time.perf_counter()
    store = Store(path, 1 << 30)
    start_us = time.time_ns() // 1000 - 24 * 3600 * 10**6
    for first in range(0, PER_TAP, AT_ONCE):
        for tap in TAPS:
            store.keep([Reading(tap, start_us + 100_000 * number, 1000 + 100 * number,
                                {"port1": 1e-3 * (1 + 1e-9 * number), "port2": 1e-6 + 1e-15 * number, "temperature_c": 21.43})
                        for number in range(first, min(first + AT_ONCE, PER_TAP))])
    store.close()
    return time.perf_counter() - began


def drain(folder: Path, port: int, key: str) -> tuple[float, float, float]:
    """Run the one file until all is acknowledged; seconds, its CPU seconds and its largest memory in MB."""
    (folder / "station.key").write_text(key)
    (folder / "bench.ini").write_text(f"[bench]\ndoor = http://127.0.0.1:{port}\nkey_file = station.key\nspool_mb = 1000\n"
                                      "[tap eom-in]\nsource = stdin\ncolumns = port1 port2\n")
    began = time.perf_counter()
    process = subprocess.Popen([sys.executable, "-I", BENCH / "one_file" / "labmon_bench.py", "run", folder / "bench.ini"],
                               stdin=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    memory_kb, cpu = 0, 0.0
    while process.poll() is None:
        memory_kb, cpu = max(memory_kb, peak_kb(process.pid)), max(cpu, cpu_s([process.pid]))
        time.sleep(0.05)
    assert process.returncode == 0
    return time.perf_counter() - began, cpu, memory_kb / 1024


def peak_kb(pid: int) -> int:
    """The largest memory of a process since it was started (what wait4 tells counts its parent's from before)."""
    try:
        return int(re.search(r"VmHWM:\s+(\d+)", Path(f"/proc/{pid}/status").read_text())[1])
    except (OSError, TypeError):
        return 0


def stored() -> int:
    """Readings that the lab holds of the day's."""
    from django.db import connection

    with connection.cursor() as cursor:
        cursor.execute("SELECT sum(upper(part) - lower(part)) FROM ingest_tapboot, unnest(held) AS part "
                       "WHERE tap_id IN (SELECT id FROM ingest_tap WHERE name = ANY(%s))",
                       [list(TAPS)])
        return int(cursor.fetchone()[0])


def main() -> None:
    with throw_away_lab() as lab, tempfile.TemporaryDirectory(dir=lab) as made:
        from ingest.stations import NewTap, add_station

        folder = Path(made)
        _, key = add_station("bench-day", None, [NewTap(name, "two-port", "W") for name in TAPS])
        _, other = add_station("bench-reference", None, [NewTap(f"ref-{name}", "two-port", "W") for name in TAPS])
        fill_s = fill(folder / "bench.spool")
        size_mb = (folder / "bench.spool").stat().st_size / 1e6
        start_us = time.time_ns() // 1000 - 3600 * 10**6
        names = [f"ref-{name}" for name in TAPS]
        lane = [make_batch(other, names, AT_ONCE // 2, number, start_us, 100, as_msgpack=False)
                for number in range(REFERENCE_BATCHES)]
        with web_process() as (port, _):
            reference = asyncio.run(send_all(port, [lane]))
            assert not reference.bad, reference.bad
            drain_s, cpu, memory_mb = drain(folder, port, key)
        count, held = 2 * PER_TAP, stored()
        rate, reference_rate = count / drain_s, reference.readings / reference.duration_s
        row("readings of the day held by the lab", f"{held} of {count}", f"{count}: {'yes' if held == count else 'NO'}")
        row("spool on disk, 2 ports and a temperature", f"{size_mb:.0f} MB, {1e6 * size_mb / count:.0f} bytes a reading")
        row("kept, 5,000 at a time", f"{count / fill_s:,.0f} readings/s")
        row("drained over the real door", f"{drain_s:.0f} s, {rate:,.0f} readings/s",
            f"300 s: {'yes' if drain_s <= 300 else 'NO'}")
        row("reference: ready-made bodies, one connection", f"{reference_rate:,.0f} readings/s")
        row("client / reference", f"{rate / reference_rate:.2f}", f"0.1: {'yes' if rate >= 0.1 * reference_rate else 'NO'}")
        row("client's CPU", f"{1e6 * cpu / count:.1f} µs a reading")
        row("client's largest memory", f"{memory_mb:.0f} MB", f"100 MB: {'yes' if memory_mb <= 100 else 'NO'}")
        row("the one file", f"{(BENCH / 'one_file' / 'labmon_bench.py').stat().st_size / 1000:.0f} kB")


if __name__ == "__main__":
    main()
