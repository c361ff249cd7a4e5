"""Bytes a reading in each form of storage, how fast days are sealed, and 24 h from a day file against pyarrow.

Two sources, float64 and declared float32, each a two-port tap's day at 10 Hz with seven columns of full-mantissa noise (what
an averaging bench PC sends; a 16-bit converter's values take less), stamps with 20 us of jitter, batches of a second.
Wanted: at most 50 bytes a reading for float64, 20 for float32, in blocks and in day files with their indexes; reading 24 h in
at most 2 x pyarrow's time.
"""

from pathlib import Path

import numpy as np

from benchmarks.lab import best_of, median, row, throw_away_lab

READINGS = 864_000
DAY_US = 20_000 * 86_400_000_000
ROUNDS = 5
INBOX_READINGS = 20_000
LATE = 600


def day_columns(seed: int) -> tuple[np.ndarray, np.ndarray, dict[str, np.ndarray]]:
    """Times, arrivals a second later at most, and noisy powers with their extremes and a temperature."""
    random = np.random.default_rng(seed)
    at_us = DAY_US + np.arange(READINGS, dtype=np.int64) * 100_000 + random.integers(0, 20, READINGS)
    arrival_us = np.repeat(at_us[9::10] + random.integers(1_000, 40_000, READINGS // 10), 10)
    bright = 1e-3 * (1 + 1e-3 * random.standard_normal(READINGS))
    dark = 1e-6 * (1 + 1e-2 * random.standard_normal(READINGS))
    spread = np.abs(random.standard_normal(READINGS)) * 1e-2
    other = spread[::-1]
    return at_us, arrival_us, {"port1": bright, "port1_min": bright * (1 - other), "port1_max": bright * (1 + other),
                               "port2": dark, "port2_min": dark * (1 - spread), "port2_max": dark * (1 + spread),
                               "temperature_c": 21 + 0.1 * random.standard_normal(READINGS)}


def main() -> None:
    """One day of each source through blocks into a file; then late readings; then read."""
    with throw_away_lab():
        import pyarrow.parquet as pq
        from django.db import connection

        from ingest.models import DayFile, Tap
        from ingest.stations import NewTap, add_station
        from ingest.store.append import write_blocks
        from ingest.store.codec import pack_even_batch
        from ingest.store.columns import narrowed
        from ingest.store.days.seal import seal_day
        from ingest.store.days.storage import days_storage
        from ingest.store.read import read_readings

        def table_size(*tables: str) -> int:
            with connection.cursor() as cursor:
                cursor.execute("SELECT " + " + ".join(f"pg_total_relation_size('{table}')" for table in tables))
                return cursor.fetchone()[0]

        def clear() -> None:
            with connection.cursor() as cursor:
                cursor.execute("TRUNCATE ingest_block, ingest_blockboot, ingest_inboxrow, ingest_touch")

        add_station("bench", None, [NewTap("full", "two-port", "W"), NewTap("single", "two-port", "W", is_float32=True)])
        for name, wanted in (("full", 50), ("single", 20)):
            tap = Tap.objects.get(name=name)
            at_us, arrival_us, columns = day_columns(seed=len(name))
            if tap.is_float32:
                columns = {column: values.astype(np.float32).astype(np.float64) for column, values in columns.items()}
            dtype = "float32" if tap.is_float32 else "float64"
            names = tuple(columns)
            bodies = [pack_even_batch(at_us[first:first + 10], names, np.array([columns[one][first:first + 10] for one in names]),
                                      first, int(arrival_us[first])) for first in range(0, INBOX_READINGS, 10)]
            with connection.cursor() as cursor:
                cursor.executemany("INSERT INTO ingest_inboxrow (tap_id, tap_boot_id, first_at_us, last_at_us, count, "
                                   "arrival_us, crc, body) VALUES (%s, 1, 0, 0, 10, 0, 0, %s)",
                                   [(tap.pk, body) for body in bodies])
            row(f"inbox, batches of 10, {dtype}", f"{table_size('ingest_inboxrow') / INBOX_READINGS:.1f} B a reading",
                "minutes only")
            clear()
            write_blocks(tap, at_us, columns, boot="b1", sequence=np.arange(READINGS), arrival_us=arrival_us)
            size = table_size("ingest_block", "ingest_blockboot") / READINGS
            row(f"blocks, {dtype}", f"{size:.1f} B a reading", f"≤ {wanted}: {'yes' if size <= wanted else 'no'}")
            before = read_readings(tap.pk, DAY_US, DAY_US + 86_400_000_000)
            sealed_s = best_of(1, lambda tap=tap: seal_day(tap.pk, DAY_US))
            file = DayFile.objects.get(tap=tap)
            size = (file.size + table_size("ingest_dayfile", "ingest_dayfileboot") / DayFile.objects.count()) / READINGS
            row(f"day file with its index, {dtype}", f"{size:.1f} B a reading",
                f"≤ {wanted}: {'yes' if size <= wanted else 'no'}")
            row(f"sealing a day, written, read back, compared, {dtype}",
                f"{READINGS / sealed_s / 1e6:.2f} M readings/s ({sealed_s:.2f} s a tap and day)")
            late_us = at_us[:LATE] + 50_000
            write_blocks(tap, late_us, {column: values[:LATE] for column, values in columns.items()}, boot="late",
                         sequence=np.arange(LATE), arrival_us=late_us)
            again_s = best_of(1, lambda tap=tap: seal_day(tap.pk, DAY_US))
            row(f"sealing it again with {LATE} late readings, {dtype}",
                f"{READINGS / again_s / 1e6:.2f} M readings/s ({again_s:.2f} s)")
            _time_reads(tap.pk, Path(days_storage().path(DayFile.objects.get(tap=tap).name)), dtype, pq, read_readings)
            assert narrowed(before).columns["port1"].dtype == (np.float32 if tap.is_float32 else np.float64)
            clear()


def _time_reads(tap_id: int, path: Path, dtype: str, pq, read_readings) -> None:
    """Each in turn, so that noise falls on both."""
    def ours() -> None:
        assert len(read_readings(tap_id, DAY_US, DAY_US + 86_400_000_000)) == READINGS + LATE

    def arrow() -> None:
        table = pq.read_table(path)
        assert min(len(table[name].to_numpy()) for name in table.column_names) == READINGS + LATE

    ten_minutes = (DAY_US + 43_200_000_000, DAY_US + 43_800_000_000)
    times = [(best_of(1, ours), best_of(1, arrow)) for _ in range(ROUNDS)]
    one, other = median([pair[0] for pair in times]), median([pair[1] for pair in times])
    row(f"24 h at 10 Hz from a day file, verified / pyarrow reading it, {dtype}",
        f"{one / other:.2f} x ({one * 1e3:.0f} ms / {other * 1e3:.0f} ms)", f"≤ 2 x: {'yes' if one <= 2 * other else 'no'}")
    short_s = median([best_of(1, lambda: read_readings(tap_id, *ten_minutes)) for _ in range(ROUNDS)])
    row(f"10 min out of that file, {dtype}", f"{short_s * 1e3:.1f} ms")


if __name__ == "__main__":
    main()
