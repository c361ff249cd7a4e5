"""A station's lives between power-ups, and what becomes of its readings on the way to the lab."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from labmon.demo.benches import BenchPlan, Polarimeter
from labmon.demo.faults import ClockOffset, Ledger, NetworkOutage, Restart, SecondDevice
from labmon.demo.seeds import generator, white_per_second

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
CLOCK_RESTART_GAP_S = 25.0
BATCH_S = 10.0
DRAIN_S = 20.0
"""Time after an outage in which the spool is sent, s."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Life:
    """One boot: its span, its clock and its firmware."""

    boot: str
    firmware: str
    start_s: float
    end_s: float
    clock_ahead_s: float = 0.0
    unset_s: float = 0.0
    is_spare: bool = False

    @property
    def clock_fault(self) -> str:
        """In the door's words; empty when the clock is good."""
        if self.unset_s:
            return "The clock was not set: a reading is stamped 1970-01-01T00:00:01.000000Z."
        if self.clock_ahead_s:
            return f"The clock is {self.clock_ahead_s / 60.0:.0f} min ahead of the server's."
        return ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Delivery:
    """Readings of one life as the lab gets them; times in s since day 1, shapes (N,)."""

    life: Life
    at_s: FloatArray
    own_s: FloatArray
    """The station's own stamp; NaN where its clock was at 1970 (``uptime_s`` says how long)."""
    uptime_s: FloatArray
    sequence: IntArray
    arrival_s: FloatArray


def lives_of(bench: BenchPlan, until_s: float, ledger: Ledger, seed: int) -> list[Life]:
    """The bench's own boots in order of time up to ``until_s``."""
    events = sorted([*ledger.of(Restart, bench.name), *ledger.of(ClockOffset, bench.name)], key=lambda row: row.start_s)
    lives, start_s, firmware, ahead_s, unset_s = [], 0.0, bench.firmware, 0.0, 0.0
    for event in [row for row in events if row.start_s < until_s]:
        lives.append(_life(bench, len(lives), seed, firmware, start_s, event.start_s, ahead_s, unset_s))
        unset_s = event.unset_s if isinstance(event, Restart) else 0.0
        firmware = event.firmware or firmware if isinstance(event, Restart) else firmware
        ahead_s = event.offset_s if isinstance(event, ClockOffset) else ahead_s
        start_s = event.start_s + (event.gap_s if isinstance(event, Restart) else CLOCK_RESTART_GAP_S)
    lives.append(_life(bench, len(lives), seed, firmware, start_s, until_s, ahead_s, unset_s))
    return lives


def spares_of(bench: BenchPlan, until_s: float, ledger: Ledger, seed: int) -> list[Life]:
    """Other boards that sent with the bench's key, up to ``until_s``."""
    return [Life(boot=_boot_id(bench, 900 + number, seed), firmware="spare board 1.4", start_s=row.start_s,
                 end_s=min(row.end_s, until_s), is_spare=True)
            for number, row in enumerate(ledger.of(SecondDevice, bench.name)) if row.start_s < until_s]


def _life(bench: BenchPlan, number: int, seed: int, firmware: str, start_s: float, end_s: float, ahead_s: float,
          unset_s: float) -> Life:
    return Life(boot=_boot_id(bench, number, seed), firmware=firmware, start_s=start_s, end_s=end_s, clock_ahead_s=ahead_s,
                unset_s=unset_s)


def _boot_id(bench: BenchPlan, number: int, seed: int) -> str:
    return f"{generator(seed, bench.name, 'boot', number).integers(2**32):08x}"


def ahead_at(bench: BenchPlan, at_s: float, ledger: Ledger) -> float:
    """How far the bench's clock is ahead at a moment, s."""
    return sum(row.offset_s for row in ledger.of(ClockOffset, bench.name) if row.start_s <= at_s < row.end_s)


def reading_times(bench: BenchPlan, first_s: float, last_s: float, cadence_s: float, seed: int) -> FloatArray:
    """When the station reads in [first, last): a fixed beat of its own, for polarimeters with jitter; s, sorted."""
    phase = 0.05 + 0.4 * generator(seed, bench.name, "beat").random()
    if isinstance(bench.head, Polarimeter):
        phase += 0.3
    count = max(int(np.ceil((last_s - first_s - phase) / cadence_s)), 0)
    beat = first_s + phase + cadence_s * np.arange(count)
    if isinstance(bench.head, Polarimeter):
        jitter = np.clip(0.5 * white_per_second(seed, f"{bench.name} jitter", beat), -1.0, 1.0)
        beat = beat + bench.head.jitter_s * jitter
    return beat[(beat >= first_s) & (beat < last_s)]


def deliveries(bench: BenchPlan, until_s: float, cadences: list[tuple[float, float]], ledger: Ledger,
               seed: int) -> Iterator[Delivery]:
    """What the lab gets from a bench, life by life.

    Args:
        until_s: End of the history, s since day 1.
        cadences: (until_s, cadence_s) in order of time: how often the station reads until then.
    """
    for life in [*lives_of(bench, until_s, ledger, seed), *spares_of(bench, until_s, ledger, seed)]:
        parts, first_s = [], life.start_s
        for end_s, cadence_s in cadences:
            last_s = min(end_s, life.end_s)
            if last_s > first_s:
                parts.append(reading_times(bench, np.ceil(first_s), last_s, cadence_s, seed))
                first_s = last_s
        at_s = np.concatenate(parts) + (0.37 if life.is_spare else 0.0)
        yield _sent(bench, life, at_s, ledger, seed)


def _sent(bench: BenchPlan, life: Life, at_s: FloatArray, ledger: Ledger, seed: int) -> Delivery:
    """Number the readings, stamp them by the station's clock, and take out what its buffer could not hold."""
    sequence = np.arange(len(at_s))
    uptime_s = at_s - life.start_s
    own_s = np.where(uptime_s < life.unset_s, np.nan, at_s + life.clock_ahead_s)
    batch_end_s = np.ceil(at_s / BATCH_S) * BATCH_S
    arrival_s = batch_end_s + 0.15 + 0.1 * np.abs(white_per_second(seed, f"{bench.name} network", batch_end_s))
    kept = np.ones(len(at_s), bool)
    for outage in ledger.of(NetworkOutage, bench.room):
        cut = outage.lasts(at_s)
        kept &= ~cut | (at_s >= outage.end_s - bench.buffer_s)
        arrival_s = np.where(cut, outage.end_s + DRAIN_S * (at_s - outage.start_s) / (outage.end_s - outage.start_s), arrival_s)
    return Delivery(life=life, at_s=at_s[kept], own_s=own_s[kept], uptime_s=uptime_s[kept], sequence=sequence[kept],
                    arrival_s=arrival_s[kept])
