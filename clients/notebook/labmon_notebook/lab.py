"""One laboratory, asked from a notebook."""

import os
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pandas as pd

from labmon_notebook import calls, frames, readings
from labmon_notebook.door import Door
from labmon_notebook.paging import all_pages
from labmon_notebook.span import span_text, tap_parts, time_text
from labmon_notebook.statistics import Statistics, statistics_of

KEY_VARIABLE = "LABMON_PERSON_KEY"


class Lab:
    """What labmon knows, as pandas objects. Nothing is asked before you call something, and nothing is ever written.

    Args:
        address: The beginning of labmon's pages, such as ``http://labmon.example:8000``.
        key: A person's key. A notebook is easily passed on with the key in it: better give ``key_file``, a file that holds
            the key alone, or set the variable LABMON_PERSON_KEY.
        ca_file: Certificates to trust beside the system's.
        timeout_s: Patience for each step of an answer, s.

    A span is text (``2031-03-04T18:00:00Z/PT14H``), a pair of times with a zone, or a time and a timedelta. A tap is
    ``station/tap``. Faults raise LabFault or one of its kinds; the message says what to do.
    """

    def __init__(self, address: str, key: str = "", *, key_file: str | Path = "", ca_file: str = "", timeout_s: float = 60.0,
                 door: Door | None = None) -> None:
        self._door = door or Door(address, _key(key, key_file), ca_file=ca_file, timeout_s=timeout_s)

    def __repr__(self) -> str:
        return f"Lab({self._door.address!r})"

    def stations(self) -> pd.DataFrame:
        """Stations by name: room, health, last heard, clock."""
        return frames.stations_frame(self._door.json(calls.STATIONS.address()))

    def taps(self) -> pd.DataFrame:
        """Taps by ``station/tap``: kind, unit, interval, newest reading."""
        return frames.taps_frame(self._door.json(calls.STATIONS.address()))

    def now(self, *taps: str) -> pd.DataFrame:
        """The newest sample of each tap, by tap."""
        said = [self._door.json(calls.NOW.address(**tap_parts(tap))) for tap in taps]
        return frames.frame_of(map(frames.now_row, said), index="tap", columns=("tap",))

    def history(self, tap: str, span: Any, *, quantity: str = "er_db", points: int = 1000) -> pd.DataFrame:
        """An envelope from rollups: ``min_…``, ``mean_…``, ``max_…`` and ``trusted_share`` by start of bucket.

        The mean of ``er_db`` is the ratio of sums, never a mean of dB. A bucket without readings is missing (NaN).
        """
        query = {"span": span_text(span), "points": points, "quantity": quantity}
        return frames.history_frame(self._door.json(calls.HISTORY.address(**tap_parts(tap)), query))

    def readings(self, tap: str, span: Any, *, as_of: Any = None) -> pd.DataFrame:
        """Every reading of the span, raw and reduced, by time: all in memory (about 0.5 kB a reading)."""
        return readings.joined(self.readings_in_parts(tap, span, as_of=as_of))

    def readings_in_parts(self, tap: str, span: Any, *, as_of: Any = None) -> Iterator[pd.DataFrame]:
        """The same piece by piece as it streams in (at most 25,000 readings or so each), for spans larger than memory.

        The first piece is empty and shows the columns.
        """
        with self._door.stream(*_readings(tap, span, "arrow", as_of)) as answer:
            yield from readings.frames_of(answer, self._door.address)

    def save_readings(self, tap: str, span: Any, path: str | Path, *, as_of: Any = None) -> Path:
        """The same in a file, by its ending: .parquet, .arrow, .csv or .json; it appears only when it is whole."""
        path = Path(path).expanduser()
        with self._door.stream(*_readings(tap, span, readings.format_of(path), as_of)) as answer:
            return readings.save(answer, path, self._door.address)

    def statistics(self, tap: str, span: Any) -> Statistics:
        """What a span of at most 8 days tells, each figure with its uncertainty."""
        return statistics_of(self._door.json(calls.STATISTICS.address(**tap_parts(tap)), {"span": span_text(span)}))

    def experiments(self) -> pd.DataFrame:
        """Experiments by id."""
        return frames.experiments_frame(self._door.json(calls.EXPERIMENTS.address()))

    def limits(self, experiment: int) -> pd.DataFrame:
        """Every version of an experiment's limits, oldest first."""
        return frames.limits_frame(self._door.json(calls.LIMITS.address(id=experiment)))

    def alarms(self, *, state: str | None = None, experiment: int | None = None, most: int | None = None) -> pd.DataFrame:
        """Alarms by id, newest first, page by page until all (or ``most``) are here."""
        def page(query: dict[str, Any]) -> dict[str, Any]:
            return self._door.json(calls.ALARMS.address(), {"state": state, "experiment": experiment, **query})

        return frames.alarms_frame(all_pages(page, "alarms", most))

    def runs(self, *, experiment: int | None = None, state: str | None = None, most: int | None = None) -> pd.DataFrame:
        """Runs by id, latest start first: ``planned``, ``running``, ``over`` or ``cancelled``."""
        def page(query: dict[str, Any]) -> dict[str, Any]:
            return self._door.json(calls.RUNS.address(), {"experiment": experiment, "state": state, **query})

        return frames.runs_frame(all_pages(page, "runs", most, following="next"))

    def ledger(self, run: int, *, version: int | None = None) -> pd.DataFrame:
        """A run's stretches, each in one class: ``good``, ``below limit``, ``untrusted``, ``no reading``.

        ``attrs`` has the totals (``good_s``, ``below_s``, …), version and figures. Without ``version``: the newest that is made.
        """
        pages: list[dict[str, Any]] = []
        first: int | None = 0
        while first is not None:
            said = self._door.json(calls.LEDGER.address(id=run), {"version": version, "first": first})
            pages.append(said)
            version, first = said["version"], said["next"]
        return frames.ledger_frame(pages)

    def holds(self) -> pd.DataFrame:
        """What is kept quiet now, by id."""
        return frames.holds_frame(self._door.json(calls.HOLDS.address()))

    def get(self, path: str, **query: Any) -> Any:
        """The JSON of any call of the API that has no function here, such as ``lab.get("/openapi.json")``."""
        return self._door.json(calls.BASE + path, query)


def _readings(tap: str, span: Any, form: str, as_of: Any) -> tuple[str, dict[str, Any]]:
    return calls.READINGS.address(**tap_parts(tap)), {"span": span_text(span), "format": form,
                                                      "as_of": None if as_of is None else time_text(as_of)}


def _key(key: str, key_file: str | Path) -> str:
    if key_file:
        key = Path(key_file).expanduser().read_text(encoding="utf-8")
    key = (key or os.environ.get(KEY_VARIABLE, "")).strip()
    if not key or not key.isascii() or any(sign.isspace() for sign in key):
        raise ValueError(f"There is no usable key. Give key_file= a file that holds a person's key alone, or set {KEY_VARIABLE}; "
                         "you make a key on the page /you/.")
    return key
