"""How the client itself does: told to the door now and then, and to people in a status file."""

from __future__ import annotations

import contextlib
import json
import os
import time
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

from labmon_bench.clock import clock_source, now_us, uptime_ms
from labmon_bench.sender import Tally
from labmon_bench.sources import SourceState
from labmon_bench.store import Store
from labmon_bench.version import VERSION

_CLOCK_ASKED_EVERY_S = 600.0


class Health:
    """What is known of the client's own state."""

    def __init__(self, store: Store, tally: Tally, states: Sequence[SourceState], *, is_told: bool) -> None:
        self.store, self.tally, self.states, self.is_told = store, tally, states, is_told
        self.begun_us = now_us()
        self._clock, self._clock_s = "unknown", -_CLOCK_ASKED_EVERY_S

    def told(self) -> dict[str, Any] | None:
        """What the door is told of the client itself beside readings; None where the settings want it untold."""
        if not self.is_told:
            return None
        return {"waiting": self.store.waiting, "dropped": self.store.dropped, "restarts": self.store.starts - 1,
                "clock": self.clock(), "mute": [state.tap for state in self.states if state.mute_since_us is not None]}

    def clock(self) -> str:
        """What keeps the PC's clock right, asked every ten minutes."""
        if time.monotonic() - self._clock_s >= _CLOCK_ASKED_EVERY_S:
            self._clock, self._clock_s = clock_source(), time.monotonic()
        return self._clock

    def status(self) -> dict[str, Any]:
        """Everything, for a person or a script."""
        oldest_us = self.store.oldest_at_us()
        answered_s = self.tally.answered_s
        return {
            "version": VERSION, "process": os.getpid(), "at_us": now_us(), "uptime_ms": uptime_ms(),
            "running_since_us": self.begun_us,
            "boot": self.store.boot.name, "restarts": self.store.starts - 1, "clock": self._clock,
            "waiting": self.store.waiting, "oldest_waiting_us": oldest_us, "dropped": self.store.dropped,
            "gaps": [asdict(gap) for gap in self.store.gaps()[:20]], "spool_trouble": self.store.disk_fault,
            "stored": self.tally.stored, "known": self.tally.known, "set_aside": self.tally.set_aside,
            "answered_s_ago": None if answered_s is None else round(time.monotonic() - answered_s, 1),
            "door_trouble": self.tally.trouble, "taps": [asdict(state) for state in self.states]}


def status_path(spool: Path) -> Path:
    """Where the status file lies."""
    return spool.with_name(spool.name + ".status.json")


def write_status(path: Path, status: dict[str, Any]) -> None:
    """Whole or not at all; on a full disk the old one stays."""
    part = path.with_name(path.name + ".part")
    with contextlib.suppress(OSError):
        part.write_text(json.dumps(status, indent=1), encoding="utf-8")
        part.replace(path)


def status_words(status: dict[str, Any]) -> str:
    """The status for a person."""
    age_s = max(0, (now_us() - status["at_us"]) // 1_000_000)
    lines = [f"client {status['version']}, process {status['process']}, status {age_s} s old, restarts {status['restarts']}, "
             f"clock: {status['clock']}",
             f"{status['waiting']} readings wait, {status['dropped']} were dropped since the spool was made",
             f"door: {status['door_trouble'] or 'well'}; stored {status['stored']}, known {status['known']}, set aside "
             f"{status['set_aside']}"]
    if age_s > 30:
        lines.insert(0, "The client does not seem to run: its status is old.")
    if status["spool_trouble"]:
        lines.append(f"spool: {status['spool_trouble']}")
    for tap in status["taps"]:
        state = f"mute: {tap['trouble']}" if tap["mute_since_us"] else "ended" if tap["is_ended"] else "well"
        lines.append(f"tap {tap['tap']}: {state}; {tap['readings']} readings, {tap['odd_lines']} times odd lines")
    lines += [f"gap: tap {gap['tap']}, {gap['count']} readings ({gap['why']})" for gap in status["gaps"][:5]]
    return "\n".join(lines)
