"""Proves the chain from the settings to an accepted reading, step by step; stops at the first fault, in words."""

from __future__ import annotations

import contextlib
import email.utils
import time
import uuid
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path

from labmon_bench.clock import EARLIEST_US, clock_source, now_us, power_up
from labmon_bench.door import Door, DoorAnswer, DoorAway
from labmon_bench.message import message, packed
from labmon_bench.reading import Reading
from labmon_bench.settings import BenchSettings, CsvSettings, SettingsFault, TapSettings, read_settings, station_key
from labmon_bench.source import OddLine, SourceEnded, SourceFault
from labmon_bench.sources import source_of
from labmon_bench.spool import Boot, Columns
from labmon_bench.store import Store, open_spool

PATIENCE_S = 15.0
"""How long a source may take for its first reading."""
TOLERANCE_S = 60.0
"""Further off, the door places readings by its own clock."""


class CheckFault(Exception):
    """A step failed: what was seen, and what to do."""


def run_check(path: Path, say: Callable[[str], None]) -> bool:
    """Go through all steps and say what was found; False at the first that fails."""
    steps = _steps(path)
    number = 0
    while True:
        number += 1
        try:
            name, words = next(steps)
        except StopIteration:
            say("All is well: labmon has taken readings from here. Start the client with: run")
            return True
        except (CheckFault, SettingsFault, DoorAway, SourceFault) as fault:
            say(f"FAILED at step {number}: {fault}")
            return False
        say(f"ok {number}. {name}: {words}")


def _steps(path: Path) -> Iterator[tuple[str, str]]:
    settings = read_settings(path)
    yield "settings", f"{len(settings.taps)} taps: {', '.join(tap.tap for tap in settings.taps)}"
    yield "spool", _try_spool(settings)
    found = {}
    for tap in settings.taps:
        found[tap.tap] = _first_reading(tap)
        yield f"source of {tap.tap}", ", ".join(f"{name} = {value}" for name, value in found[tap.tap].values.items())
    yield "clock", _look_at_clock()
    with contextlib.closing(Door(settings.door, settings.ca_file, settings.timeout_s)) as door:
        yield "door", _knock(door)
        key = station_key(settings)
        boot = Boot(f"check-{uuid.uuid4().hex[:8]}", power_up())
        _post(door, boot, [], key)
        yield "key", "it opens the door"
        for tap in settings.taps:
            yield f"reading of {tap.tap}", _offer(door, boot, tap, found[tap.tap], key)


def _try_spool(settings: BenchSettings) -> str:
    spool = open_spool(settings.spool, int(settings.spool_mb * 2**20))
    try:
        return f"{settings.spool} can be written, {spool.waiting} readings wait in it"
    finally:
        spool.close()


def _first_reading(tap: TapSettings) -> Reading:
    """One reading, whatever the source needs for it."""
    if isinstance(tap.source, CsvSettings):  # any old line will do
        tap = replace(tap, source=replace(tap.source, is_from_start=True))
    source = source_of(tap, Store(Path(":memory:"), 1 << 20))
    until_s = time.monotonic() + PATIENCE_S
    odd = ""
    try:
        while time.monotonic() < until_s:
            try:
                readings, place = source.read()
            except OddLine as fault:
                odd = str(fault)
                continue
            if readings:
                return readings[-1]
            if not source.is_awaited and place is None:
                time.sleep(min(tap.read_every_s, 0.5))
            source.kept()
    except SourceEnded as end:
        raise CheckFault(f"tap {tap.tap}: {end} before it gave a reading; start what writes to it") from end
    except SourceFault as fault:
        raise CheckFault(f"tap {tap.tap}: {fault}") from fault
    finally:
        source.close()
    raise CheckFault(f"tap {tap.tap}: no reading within {PATIENCE_S:g} s; {odd or 'is its writer running?'}")


def _look_at_clock() -> str:
    if now_us() < EARLIEST_US:
        raise CheckFault("the PC's clock was never set; set it, and let the system keep it by network time")
    source = clock_source()
    told = "" if source != "not synchronized" else "; nothing keeps it right: turn network time on"
    return time.strftime("%Y-%m-%d %H:%M:%S UTC", time.gmtime()) + f", kept by: {source}{told}"


def _knock(door: Door) -> str:
    answer = door.knock()
    if answer.status != 405 or "station door" not in answer.words:
        raise CheckFault(f"something answers at {door.address}, but it is no labmon station door ({answer.words}); correct door")
    ahead_s = _ahead_s(answer)
    if abs(ahead_s) > TOLERANCE_S:
        raise CheckFault(f"the PC's clock is {abs(ahead_s):.0f} s {'ahead of' if ahead_s > 0 else 'behind'} labmon's; labmon "
                         "would place all readings by its own clock. Set the PC's clock and let the system keep it right")
    return f"labmon answers at {door.address}; the clocks differ by {abs(ahead_s):.0f} s"


def _ahead_s(answer: DoorAnswer) -> float:
    try:
        return time.time() - email.utils.parsedate_to_datetime(answer.date).timestamp()
    except (TypeError, ValueError):
        return 0.0


def _offer(door: Door, boot: Boot, tap: TapSettings, reading: Reading, key: str) -> str:
    """Send the reading; of a file, which is read again later, only its columns."""
    names = tuple(reading.values)
    if isinstance(tap.source, CsvSettings):
        _post(door, boot, [Columns(0, tap.tap, names, [], [], [], [[] for _ in names], [])], key)
        return "labmon takes its columns; lines are sent by run, so that none is sent twice"
    values = [[value] for value in reading.values.values()]
    columns = Columns(0, tap.tap, names, [0], [reading.at_us], [reading.uptime_ms], values, [None])
    said = _post(door, boot, [columns], key).said
    if said["set_aside"]:
        aside = said["set_aside"][0]
        raise CheckFault(f"tap {tap.tap}: labmon set the reading aside: {aside['field']}: {aside['why']}; {aside['do']}")
    if said["accepted"]["ranges"].get(tap.tap) != [[0, 0]]:
        raise CheckFault(f"tap {tap.tap}: labmon did not acknowledge the reading: {str(said)[:200]}")
    return "committed and acknowledged"


def _post(door: Door, boot: Boot, columns: list[Columns], key: str) -> DoorAnswer:
    answer = door.post(*packed(message(boot, columns)), key)
    if answer.status in (401, 403):
        raise CheckFault(f"the key is refused ({answer.words}); put the station's current key into the key file")
    if answer.status in (429, 503):
        raise CheckFault(f"labmon cannot take readings just now ({answer.words}); run keeps them until it can. Check again later")
    if answer.status != 200 or not isinstance(answer.said, dict):
        raise CheckFault(f"labmon refuses this ({answer.words}); correct the settings, or the tap on the station's page")
    return answer
