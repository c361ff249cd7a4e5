"""Benches that send to the real door of the lab under test, and the pipeline run by hand."""

import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from functools import cache
from typing import Any

import httpx
import numpy as np
from django.db import connection

from ingest.models import Tap
from ingest.stations import make_key
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.process import process_touched


@cache
def key_of(station_id: int, station_name: str) -> str:
    """A key of the station, made at its first batch."""
    from ingest.models import Station

    return make_key(Station.objects.get(pk=station_id, name=station_name))


def send(address: str, tap: Tap, at_us: np.ndarray, columns: dict[str, np.ndarray]) -> None:
    """One batch over HTTP; all of it must be stored."""
    body = {"at": at_us.tolist()} | {name: values.tolist() for name, values in columns.items()}
    answer = httpx.post(
        f"{address}/api/v1/readings",
        json={"taps": {tap.name: body}},
        timeout=30,
        headers={"Authorization": f"Bearer {key_of(tap.station_id, tap.station.name)}"},
    )
    assert answer.status_code == 200, answer.text
    assert answer.json()["stored"] == len(at_us), answer.text[:500]


def send_two_port(address: str, tap: Tap, er_db: float, *, seconds: int) -> None:
    """Readings of one extinction ratio up to now, one a second.

    Leak is 10^(-ER/10), both ports together give 1 mW; a little ripple, for a dead calm line would rightly be called flat.
    """
    at_us = times_up_to_now(seconds)
    leak = 10.0 ** (-(er_db + 0.05 * np.sin(np.arange(seconds) * 1.7)) / 10.0)
    send(
        address,
        tap,
        at_us,
        {"port1": 1e-3 / (1.0 + leak), "port2": 1e-3 * leak / (1.0 + leak), "temperature_c": np.full(seconds, 21.4)},
    )


def send_stokes(address: str, tap: Tap, *, seconds: int, turn_deg: float) -> None:
    """Fully polarized light that turns slowly away from horizontal, up to now."""
    angle = np.radians(np.linspace(0.0, turn_deg, seconds))
    send(
        address,
        tap,
        times_up_to_now(seconds),
        {"s0": np.ones(seconds), "s1": np.cos(angle), "s2": np.sin(angle), "s3": np.zeros(seconds)},
    )


def times_up_to_now(seconds: int) -> np.ndarray:
    """One time a second, ending now, µs."""
    return time.time_ns() // 1000 - np.arange(seconds)[::-1] * 1_000_000


def settle() -> None:
    """Run the pipeline until nothing is left to do."""
    beside(catch_up)


def judge() -> None:
    """Reduce and judge what has arrived."""
    beside(process_touched)


def beside(work: Callable[..., Any], *arguments: Any, **options: Any) -> Any:
    """Run ``work`` in a thread of its own: Playwright's loop runs in this one, where messages could not be published."""

    def run() -> Any:
        try:
            return work(*arguments, **options)
        finally:
            connection.close()

    with ThreadPoolExecutor(1) as pool:
        return pool.submit(run).result()
