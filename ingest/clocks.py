"""Where on the time axis a reading is placed, and what a station's clock is worth (CONTRACT.md, section 1). Pure.

Three clocks speak: the server's (arrival), the station's own (``at``, perhaps wrong or unset) and the station's uptime
(always running, from an unknown start). A station's clock within 60 s of the server's is believed as it is; its offset is
estimated and shown, never applied. Otherwise the whole boot is placed by the server's clock and the uptimes.
"""

from dataclasses import dataclass, replace
from datetime import UTC, datetime

import numpy as np

from ingest.store.columns import NO_TIME, BoolArray, IntArray
from ingest.times import SECOND_US, rfc3339_of, us_of

CLOCK_TOLERANCE_US = 60 * SECOND_US
EARLIEST_LIVE_US = us_of(datetime(2020, 1, 1, tzinfo=UTC))
LONGEST_UPTIME_MS = 100 * 366 * 86_400_000
"""A hundred years; more is no uptime."""
UPTIME_WRAP_MS = 1 << 32
_WRAP_TOLERANCE_MS = 3_600_000
_LONGEST_ROUND_AGE_MS = 7 * 86_400_000
"""A reading from before a counter's new round is believed up to this age; beyond, its uptime is a mistake."""
_OSCILLATOR_PPM = 200
"""How fast the smallest offset may creep up again, so that it follows an oscillator that runs slow. Plain quartz keeps
within about 100 parts in a million (common practice, no source)."""
_BELIEVED_AGE_US = 400 * 86_400 * SECOND_US
NO_UPTIME = -1


@dataclass(frozen=True, slots=True)
class ClockState:
    """What is known of a station's clocks within one boot."""

    is_server_timed: bool = False
    fault: str = ""
    offset_us: int | None = None
    uptime_zero_us: int | None = None
    uptime_last_ms: int | None = None
    last_arrival_us: int | None = None


@dataclass(frozen=True, slots=True)
class Sending:
    """One attempt to send, as the station's clocks and the server's saw it."""

    arrival_us: int
    now_at_us: int | None = None
    now_uptime_ms: int | None = None
    has_boot: bool = True
    oldest_stamp_us: int | None = None
    """Smallest ``at`` in the body."""


@dataclass(frozen=True, slots=True)
class Placed:
    """Times of readings, each of shape (N,)."""

    at_us: IntArray
    is_server_timed: BoolArray
    is_impossible: BoolArray
    """The uptime lies after ``now.uptime_ms``: the reading cannot be placed."""
    sent_own_us: int
    """Moment of sending on the axis of the station's own stamps."""
    sent_server_us: int
    """Moment of sending on the axis of server-timed readings."""


def observe(state: ClockState, sending: Sending) -> ClockState:
    """The state after one more sending."""
    arrival_us = sending.arrival_us
    elapsed_us = max(0, arrival_us - (arrival_us if state.last_arrival_us is None else state.last_arrival_us))
    creep_us = elapsed_us * _OSCILLATOR_PPM // 1_000_000
    offset_us, zero_us, uptime_ms = state.offset_us, state.uptime_zero_us, state.uptime_last_ms
    if sending.now_at_us is not None:
        offset_us = _smallest(offset_us, creep_us, arrival_us - sending.now_at_us)
    if sending.now_uptime_ms is not None:
        unwrapped_ms = unwrap(state, sending)
        zero_us = _smallest(zero_us, creep_us, arrival_us - 1000 * unwrapped_ms)
        uptime_ms = max(uptime_ms or 0, unwrapped_ms)
    fault = clock_fault(sending)
    kept = state.fault if sending.has_boot and not fault else fault
    is_server_timed = bool(fault) or (sending.has_boot and state.is_server_timed)
    return ClockState(is_server_timed, kept, offset_us, zero_us, uptime_ms, max(arrival_us, state.last_arrival_us or 0))


def _smallest(known_us: int | None, creep_us: int, seen_us: int) -> int:
    """The smallest offset, allowed to creep up; a jump by more than a minute is no delay: the clock was set or began anew."""
    if known_us is None or seen_us > known_us + CLOCK_TOLERANCE_US:
        return seen_us
    return min(seen_us, known_us + creep_us)


def unwrap(state: ClockState, sending: Sending) -> int:
    """``now.uptime_ms`` with the rounds of a 32-bit counter added."""
    raw_ms = sending.now_uptime_ms or 0
    if state.uptime_zero_us is None or raw_ms >= UPTIME_WRAP_MS or not sending.has_boot:
        return raw_ms
    expected_ms = (sending.arrival_us - state.uptime_zero_us) // 1000
    rounds = max(0, round((expected_ms - raw_ms) / UPTIME_WRAP_MS))
    unwrapped_ms = raw_ms + rounds * UPTIME_WRAP_MS
    return unwrapped_ms if abs(expected_ms - unwrapped_ms) <= _WRAP_TOLERANCE_MS else raw_ms


def clock_fault(sending: Sending) -> str:
    """What is wrong with the station's clock, in words; empty where nothing is."""
    if sending.oldest_stamp_us is not None and sending.oldest_stamp_us < EARLIEST_LIVE_US:
        return f"The clock was not set: a reading is stamped {rfc3339_of(sending.oldest_stamp_us)}."
    if sending.now_at_us is None:
        return ""
    offset_us = sending.arrival_us - sending.now_at_us
    if abs(offset_us) <= CLOCK_TOLERANCE_US:
        return ""
    if sending.now_at_us < EARLIEST_LIVE_US:
        return f"The clock was not set: it says {rfc3339_of(sending.now_at_us)}."
    return f"The clock is {_duration_words(abs(offset_us))} {'behind' if offset_us > 0 else 'ahead of'} the server's."


def place(state: ClockState, sending: Sending, own_at_us: IntArray, uptime_ms: IntArray) -> Placed:
    """Times of the readings of one body.

    Args:
        state: As ``observe`` gave it for this sending.
        own_at_us: The station's own stamps, NO_TIME where none, shape (N,).
        uptime_ms: As sent, NO_UPTIME where none, shape (N,).
    """
    arrival_us = sending.arrival_us
    has_own = own_at_us != NO_TIME
    impossible = np.zeros(own_at_us.shape, np.bool_)
    sent_own_us = arrival_us if sending.now_at_us is None else sending.now_at_us
    if not state.is_server_timed and bool(has_own.all()):
        return Placed(own_at_us, impossible, impossible, sent_own_us, arrival_us)
    at_us = np.full(own_at_us.shape, arrival_us, np.int64)
    sent_server_us = arrival_us
    by_uptime = np.zeros(own_at_us.shape, np.bool_)
    if sending.now_uptime_ms is not None and state.uptime_zero_us is not None:
        by_uptime = uptime_ms != NO_UPTIME
        unwrapped_ms = unwrap(replace(state, last_arrival_us=None), sending)
        sent_server_us = state.uptime_zero_us + 1000 * unwrapped_ms
        age_ms, impossible = _uptime_age_ms(sending.now_uptime_ms, uptime_ms)
        impossible &= by_uptime
        at_us = np.where(by_uptime, sent_server_us - 1000 * age_ms, at_us)
    if state.is_server_timed:
        by_stamp = has_own & ~by_uptime
        if by_stamp.any():
            at_us[by_stamp] = arrival_us - _stamp_age_us(sending.now_at_us, own_at_us[by_stamp])
        return Placed(at_us, np.ones_like(has_own), impossible, sent_own_us, sent_server_us)
    return Placed(np.where(has_own, own_at_us, at_us), ~has_own, impossible & ~has_own, sent_own_us, sent_server_us)


def _uptime_age_ms(now_ms: int, uptime_ms: IntArray) -> tuple[IntArray, BoolArray]:
    """Age by uptime, and where it cannot be: an uptime well after now, unless a 32-bit counter began a new round lately."""
    age_ms = now_ms - uptime_ms
    is_after = age_ms < -CLOCK_TOLERANCE_US // 1000
    if not is_after.any():
        return age_ms, is_after
    if now_ms < UPTIME_WRAP_MS:
        age_ms = np.where(is_after, age_ms + UPTIME_WRAP_MS, age_ms)
    return age_ms, is_after & ((age_ms < 0) | (age_ms > _LONGEST_ROUND_AGE_MS))


def _stamp_age_us(now_at_us: int | None, own_at_us: IntArray) -> IntArray:
    """Age by the station's own, wrong clock: only differences of its stamps are used.

    Stamps that do not belong to the same setting of the clock as ``now.at`` (or have none to compare with) count from the
    newest of them, which is taken as just measured.
    """
    newest_us = int(own_at_us.max())
    if now_at_us is not None:
        age_us = now_at_us - own_at_us
        is_apart = (age_us < -CLOCK_TOLERANCE_US) | (age_us > _BELIEVED_AGE_US)
        if not is_apart.any():
            return age_us
        newest_us = int(own_at_us[is_apart].max())
        age_us = np.where(is_apart, newest_us - own_at_us, age_us)
    else:
        age_us = newest_us - own_at_us
    return np.where(np.abs(age_us) > _BELIEVED_AGE_US, 0, age_us)


def _duration_words(us: int) -> str:
    seconds = us // SECOND_US
    for size, word in ((86_400, "d"), (3600, "h"), (60, "min")):
        if seconds >= 2 * size:
            return f"{seconds // size} {word}"
    return f"{seconds} s"
