"""24 h of 10 Hz of one tap into numpy: sealed blocks against pyarrow reading the same columns, and against SQL rows.

Wanted: at most 2 x pyarrow's time, at least 5 x faster than rows.
"""

import tempfile
from pathlib import Path

import numpy as np

from benchmarks.lab import best_of, median, row, throw_away_lab

READINGS = 864_000
START_US = 1_900_000_000_000_000
ROUNDS = 5


def day_columns(seed: int = 1) -> tuple[np.ndarray, dict[str, np.ndarray]]:
    """A two-port tap's day: noisy powers in full doubles, as a bench PC sends them."""
    random = np.random.default_rng(seed)
    at_us = START_US + np.arange(READINGS, dtype=np.int64) * 100_000 + random.integers(-20, 20, READINGS)
    bright = 1e-3 * (1 + 1e-3 * random.standard_normal(READINGS))
    dark = 1e-6 * (1 + 1e-2 * random.standard_normal(READINGS))
    return at_us, {"port1": bright, "port2": dark, "port2_min": dark * 0.99, "port2_max": dark * 1.01,
                   "temperature_c": 21 + 0.1 * random.standard_normal(READINGS)}


def main() -> None:
    """Write the day once into blocks, a Parquet file and rows; read each in turn, ``ROUNDS`` times."""
    with throw_away_lab() as folder:
        import pyarrow as pa
        import pyarrow.parquet as pq
        from django.db import connection

        from ingest.models import Tap
        from ingest.stations import NewTap, add_station
        from ingest.store.append import write_blocks
        from ingest.store.read import read_readings

        add_station("bench", None, [NewTap("eom-in", "two-port", "W")])
        tap = Tap.objects.get()
        at_us, columns = day_columns()
        sequence = np.arange(READINGS, dtype=np.int64)
        write_blocks(tap, at_us, columns, boot="b1", sequence=sequence)
        table = pa.table({"at_us": at_us, "sequence": sequence, **columns})
        path = Path(tempfile.mkdtemp(dir=folder)) / "day.parquet"
        pq.write_table(table, path, compression="zstd", row_group_size=36_000)
        with connection.cursor() as cursor:
            names = ", ".join(columns)
            cursor.execute("CREATE TABLE keyed (tap int, at_us bigint, sequence bigint, "
                           + ", ".join(f"{name} float8" for name in columns) + ", PRIMARY KEY (tap, at_us, sequence))")
            with cursor.copy(f"COPY keyed (tap, at_us, sequence, {names}) FROM STDIN") as copy:
                for values in zip(at_us.tolist(), sequence.tolist(), *(c.tolist() for c in columns.values()), strict=True):
                    copy.write_row((1, *values))
            cursor.execute("ANALYZE keyed")

        def by_blocks() -> None:
            assert len(read_readings(tap.pk, START_US - 10**6, START_US + 86_401 * 10**6)) == READINGS

        def by_pyarrow() -> None:
            read = pq.read_table(path)
            assert len([read[name].to_numpy() for name in read.column_names][0]) == READINGS

        def by_rows() -> None:
            with connection.cursor() as cursor:
                cursor.execute(f"SELECT at_us, sequence, {names} FROM keyed WHERE tap = 1 AND at_us >= %s ORDER BY at_us",
                               [START_US - 10**6])
                assert len(np.array(cursor.fetchall())) == READINGS

        blocks, arrow, rows = ([best_of(1, action) for _ in range(ROUNDS)] for action in (by_blocks, by_pyarrow, by_rows))
        row("24 h at 10 Hz, one tap, into numpy: blocks / pyarrow on the same Parquet", f"{median(blocks) / median(arrow):.2f} x "
            f"({median(blocks) * 1e3:.0f} ms / {median(arrow) * 1e3:.0f} ms)", "≤ 2 x")
        row("the same: SQL rows / blocks", f"{median(rows) / median(blocks):.1f} x ({median(rows):.2f} s)", "≥ 5 x")


if __name__ == "__main__":
    main()
