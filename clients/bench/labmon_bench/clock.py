"""The clocks of a bench PC: wall time, time since power-up, and what keeps the wall clock right."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

EARLIEST_US = 1_577_836_800_000_000
"""2020: an earlier wall clock was never set."""
_SAME_POWER_UP_S = 60


def now_us() -> int:
    """Wall time, microseconds since 1970, as the PC has it."""
    return time.time_ns() // 1000


def uptime_ms() -> int:
    """Time since the PC's power-up, ms; goes on while it sleeps where the system can tell."""
    if hasattr(time, "CLOCK_BOOTTIME"):
        return time.clock_gettime_ns(time.CLOCK_BOOTTIME) // 1_000_000
    return time.monotonic_ns() // 1_000_000


def power_up() -> str:
    """A name for this run of the PC: readings of the same one share the uptime axis, also after the client restarts."""
    try:
        return "id " + Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
    except OSError:
        return f"about {now_us() // 1_000_000 - uptime_ms() // 1000}"


def is_same_power_up(one: str, other: str) -> bool:
    """Whether two names mean one run of the PC; where the system has no name of its own, by the moment of power-up."""
    kind, _, first = one.partition(" ")
    other_kind, _, second = other.partition(" ")
    if kind == other_kind == "about":
        return abs(int(first) - int(second)) <= _SAME_POWER_UP_S
    return one == other


def clock_source() -> str:
    """What keeps the wall clock right, in the system's own words; "unknown" where it does not say."""
    if sys.platform == "win32":
        return _said(["w32tm", "/query", "/source"]) or "unknown"
    if sys.platform == "darwin":
        return "unknown"
    is_synchronized = {"yes": "synchronized", "no": "not synchronized"}
    return is_synchronized.get(_said(["timedatectl", "show", "--property=NTPSynchronized", "--value"]), "unknown")


def _said(command: list[str]) -> str:
    try:
        return subprocess.run(command, capture_output=True, text=True, timeout=10, check=True).stdout.strip()
    except (OSError, subprocess.SubprocessError, UnicodeDecodeError):
        return ""
