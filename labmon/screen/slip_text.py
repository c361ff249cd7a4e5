"""The texts of a joining slip: settings for the bench client, one line for a first reading by hand, a text for a board. Pure.

tests/labmon/screen/test_slip_text.py reads the settings with the client's own reader and runs the other two against a door.
"""

import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

KEY_TO_COME: Final = "<station key>"
BOARD_LINES: Final = 12
_COLUMNS: Final = {
    "two-port": ("port1", "port2"),
    "dark-port": ("port2",),
    "stokes": ("s0", "s1", "s2", "s3"),
    "climate": ("temperature_c",),
}
_FIRST_VALUES: Final = {"port1": 0.000998, "port2": 0.0000011, "s0": 1.0, "s1": 0.99, "s2": 0.05, "s3": 0.02,
                        "temperature_c": 21.4}
_QUESTIONS: Final = {"climate": "temperature_c: READ?"}


@dataclass(frozen=True, slots=True)
class SlipTap:
    """A tap as its texts need it."""

    name: str
    kind: str
    interval_s: float | None


def settings_text(taps: Sequence[SlipTap], *, door: str) -> str:
    """A settings file for the bench client; the key stands in a file of its own, ``station.key``."""
    lines = ["[bench]", f"door = {door}", "key_file = station.key"]
    for tap in taps:
        lines += ["", f"[tap {tap.name}]", "source = instrument", "address = TCPIP0::192.0.2.20::5025::SOCKET", "ask =",
                  f"    {_QUESTIONS.get(tap.kind, ' '.join(_COLUMNS[tap.kind]) + ': READ?')}",
                  f"read_every_s = {tap.interval_s or 1:g}"]
    return "\n".join(lines) + "\n"


def curl_line(tap: SlipTap, *, address: str, key: str) -> str:
    """One reading by hand."""
    body = json.dumps({"taps": {tap.name: {name: [_FIRST_VALUES[name]] for name in _COLUMNS[tap.kind]}}})
    return f"curl -H 'Authorization: Bearer {key}' -H 'Content-Type: application/json' -d '{body}' {address}"


def board_text(tap: SlipTap, *, address: str, key: str) -> str:
    """Twelve lines of MicroPython: boot id, numbers, uptimes, a buffer of ten minutes, forgotten only when acknowledged."""
    names = ", ".join(f'"{name}"' for name in ("sequence", "uptime_ms", *_COLUMNS[tap.kind]))
    return "\n".join([
        "import json, os, time, requests  # MicroPython; join the network before this",
        f"from ports import read_ports  # yours: gives {', '.join(_COLUMNS[tap.kind])} as read, no zero taken off",
        "boot, number, kept = os.urandom(8).hex(), 0, []",
        f'headers = {{"Authorization": "Bearer {key}", "Content-Type": "application/json"}}',
        "while True:",
        "    kept, number = (kept + [(number, time.time_ns() // 1000000, *read_ports())])[-600:], number + 1",
        f"    columns = dict(zip(({names}), map(list, zip(*kept[:60]))))",
        '    body = {"boot": boot, "now": {"at": None, "uptime_ms": time.time_ns() // 1000000}, '
        f'"taps": {{"{tap.name}": columns}}}}',
        "    try:",
        f'        if requests.post("{address}", data=json.dumps(body), headers=headers).status_code == 200: kept = kept[60:]',
        "    except OSError: pass  # no network: the next round sends it",
        f"    time.sleep({tap.interval_s or 1:g})",
    ]) + "\n"
