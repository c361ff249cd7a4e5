"""Answers as frames: times are UTC, lists are joined, what is missing is missing."""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import pandas as pd

TIME = "datetime64[us, UTC]"
UNITS = {"er_db": "dB", "angle_deg": "deg", "dop": "", "power_w": "W"}


def frame_of(rows: Iterable[Mapping[str, Any]], *, index: str = "", columns: Sequence[str] = (),
             texts: Sequence[str] = ()) -> pd.DataFrame:
    """Rows of an answer as a frame.

    Args:
        index: The column that names the rows.
        columns: Columns that are there even without rows, in this order; what an answer has beside them follows.
        texts: Columns of lists, joined with "; ".
    """
    rows = list(rows)
    known = dict.fromkeys((*columns, *(name for row in rows for name in row)))
    frame = pd.DataFrame([{name: row.get(name) for name in known} for row in rows], columns=list(known))
    for name in texts:
        frame[name] = [None if part is None else "; ".join(map(str, part)) for part in frame[name]]
    for name in known:
        if is_time(name):
            frame[name] = times_of(frame[name])
    return frame.set_index(index) if index else frame


def is_time(name: str) -> bool:
    """True for the names that times have in the API."""
    return name == "at" or name.endswith("_at") or name in {"valid_from", "valid_until", "shelved_until", "until", "from"}


def times_of(texts: Any) -> pd.Series:
    """RFC 3339 texts (or None) as UTC times, shape (N,), NaT where missing."""
    return pd.to_datetime(pd.Series(texts, dtype=object), utc=True, format="ISO8601").astype(TIME)


def stations_frame(said: Mapping[str, Any]) -> pd.DataFrame:
    """A row a station."""
    rows = [{**{name: value for name, value in one.items() if name != "taps"}, "tap_count": len(one["taps"])}
            for one in said["stations"]]
    return frame_of(rows, index="name", columns=("name", "room", "health", "last_heard_at", "firmware", "clock_offset_s",
                                                 "clock_fault", "is_server_timed", "link_lost_at", "tap_count"))


def taps_frame(said: Mapping[str, Any]) -> pd.DataFrame:
    """A row a tap."""
    rows = [{"tap": tap["tap"], "station": station["name"], "room": station["room"],
             **{name: value for name, value in tap.items() if name not in {"tap", "name"}}}
            for station in said["stations"] for tap in station["taps"]]
    return frame_of(rows, index="tap", columns=("tap", "station", "room", "kind", "unit", "interval_s", "last_heard_at",
                                                "newest_at", "unknown_columns"), texts=("unknown_columns",))


def now_row(said: Mapping[str, Any]) -> dict[str, Any]:
    """A newest sample as one flat row."""
    row = {name: value for name, value in said.items() if name not in {"sop", "last_trusted"}}
    for axis, part in enumerate(said.get("sop") or [None] * 3, start=1):
        row[f"sop{axis}"] = part
    for name, last in (said.get("last_trusted") or {}).items():
        row[f"last_trusted_{name}"] = last["value"] if last else None
        row[f"last_trusted_{name}_at"] = last["at"] if last else None
    return {name: "; ".join(value) if isinstance(value, list) else value for name, value in row.items()}


def history_frame(said: Mapping[str, Any]) -> pd.DataFrame:
    """An envelope by the start of each bucket; ``attrs`` has the bucket's length."""
    quantity = said["quantity"]
    frame = pd.DataFrame({f"{part}_{quantity}": pd.Series(said[part], dtype="float64") for part in ("min", "mean", "max")}
                         | {"trusted_share": pd.Series(said["trusted_share"], dtype="float64")})
    frame.index = pd.DatetimeIndex(times_of(said["at"]), name="at")
    frame.attrs.update({name: said[name] for name in ("tap", "quantity", "span", "bucket_s")})
    return frame


def experiments_frame(said: Mapping[str, Any]) -> pd.DataFrame:
    """A row an experiment."""
    return frame_of(said["experiments"], index="id", texts=("taps",),
                    columns=("id", "name", "owner", "taps", "no_reading_after_s", "untrusted_after_s", "created_at"))


def limits_frame(said: Mapping[str, Any]) -> pd.DataFrame:
    """A row a version of a limit, oldest first; ``unit`` is that of alarm, warning and deadband."""
    in_force = {(one["id"], one["version"]) for one in said["limits"]}
    rows = [{**one, "unit": UNITS.get(one["quantity"]), "is_in_force": (one["id"], one["version"]) in in_force}
            for one in said["history"]]
    return frame_of(rows, columns=("id", "version", "tap", "quantity", "unit", "alarm", "warning", "valid_from", "valid_until",
                                   "is_in_force"))


def alarms_frame(rows: Iterable[Mapping[str, Any]]) -> pd.DataFrame:
    """A row an alarm, newest first; ``unit`` is that of value and limit."""
    flat = [{**{name: value for name, value in row.items() if name != "earlier_bounds"},
             "unit": UNITS.get(row["quantity"] or ""), "earlier_bounds": len(row["earlier_bounds"])} for row in rows]
    return frame_of(flat, index="id", columns=("id", "kind", "experiment", "tap", "quantity", "unit", "value", "limit", "level",
                                               "state", "raised_at", "alarm_at", "returned_at", "acknowledged_at"))


def runs_frame(rows: Iterable[Mapping[str, Any]]) -> pd.DataFrame:
    """A row a run, latest start first."""
    return frame_of(rows, index="id", texts=("taps",), columns=(
        "id", "experiment", "name", "state", "owner", "deputy", "taps", "starts_at", "ends_at", "ended_at", "length_s"))


def ledger_frame(pages: Sequence[Mapping[str, Any]]) -> pd.DataFrame:
    """A row a stretch, by its start; ``attrs`` has the totals in seconds and the rest of the answer."""
    rows = [row for page in pages for row in page["intervals"]]
    frame = frame_of(rows, texts=("reasons", "taps"), columns=(
        "from", "until", "length_s", "class", "is_doubtful", "reasons", "taps"))
    frame.attrs.update({name: value for name, value in pages[0].items() if name not in {"intervals", "next"}})
    return frame.set_index("from")


def holds_frame(said: Mapping[str, Any]) -> pd.DataFrame:
    """A row for each thing kept quiet now."""
    return frame_of(said["holds"], index="id", columns=("id", "kind", "tap", "alarms", "limit", "by", "reason", "begun_at",
                                                        "until", "ended_at"))
