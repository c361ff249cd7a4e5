"""Placing readings in time, bare: laws that hold for any clocks (CONTRACT.md, section 1)."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.clocks import NO_UPTIME, ClockState, Sending, clock_fault, observe, place
from ingest.store.columns import NO_TIME

S = 1_000_000
NOW_US = 1_930_356_665 * S
delays_us = st.integers(0, 30 * S)


def run(sendings):
    state = ClockState()
    for sending in sendings:
        state = observe(state, sending)
    return state


@given(st.lists(delays_us, min_size=1, max_size=20))
def test_the_uptime_zero_is_found_within_the_smallest_delay(delays):
    """A true zero at NOW_US, heard once a second through a network that delays: never before it, and near the best."""
    state = run([Sending(NOW_US + second * S + delay, now_uptime_ms=1000 * second) for second, delay in enumerate(delays)])
    assert NOW_US <= state.uptime_zero_us <= NOW_US + min(delays) + 200 * 60


@given(st.lists(delays_us, min_size=1, max_size=20), st.integers(-20 * S, 20 * S))
def test_the_offset_is_the_smallest_seen(delays, offset_us):
    state = run(
        [Sending(NOW_US + second * S + delay, now_at_us=NOW_US + second * S - offset_us) for second, delay in enumerate(delays)]
    )
    assert offset_us <= state.offset_us <= offset_us + min(delays) + 200 * 60 and not state.is_server_timed


@settings(deadline=None, max_examples=30)
@given(st.integers(-100, 100), st.integers(1, 40))
def test_a_slow_or_fast_oscillator_is_followed(parts_per_million, days):
    """Uptime that runs wrong by up to 100 parts in a million, heard each minute without delay: placed within a second."""
    state = ClockState()
    for minute in range(0, 1440 * days, 7):
        uptime_ms = round(60_000 * minute * (1 + parts_per_million * 1e-6))
        sending = Sending(NOW_US + 60 * S * minute, now_uptime_ms=uptime_ms % 2**32)
        state = observe(state, sending)
        at_us = place(state, sending, np.array([NO_TIME]), np.array([sending.now_uptime_ms])).at_us[0]
        assert abs(at_us - sending.arrival_us) < S


@given(st.integers(0, 2**32 - 1), st.lists(st.integers(0, 3600), min_size=1, max_size=30))
def test_a_32_bit_counter_is_unwrapped(start_ms, pauses_s):
    state, elapsed_ms = ClockState(), 0
    for pause_s in (0, *pauses_s):
        elapsed_ms += 1000 * pause_s
        sending = Sending(NOW_US + 1000 * elapsed_ms, now_uptime_ms=(start_ms + elapsed_ms) % 2**32)
        state = observe(state, sending)
        ages_ms = np.array([0, 1_000, 50_000])
        placed = place(state, sending, np.full(3, NO_TIME), (start_ms + elapsed_ms - ages_ms) % 2**32)
        assert (sending.arrival_us - placed.at_us).tolist() == (1000 * ages_ms).tolist() and not placed.is_impossible.any()
    assert state.uptime_last_ms == start_ms + elapsed_ms


@given(st.integers(-(10**15), 10**15), st.integers(-(10**9), 10**9), st.lists(st.integers(0, 10**8), min_size=1, max_size=10))
def test_only_differences_of_a_wrong_clock_are_used(wrong_us, now_us, ages_us):
    """Where a boot is server-timed, an age is the same whatever the clock says."""
    sending = Sending(NOW_US, now_at_us=wrong_us)
    own = wrong_us - np.array(ages_us, np.int64)
    placed = place(ClockState(is_server_timed=True), sending, own, np.full(len(own), NO_UPTIME))
    assert (NOW_US - placed.at_us).tolist() == ages_us and placed.is_server_timed.all()


@given(st.integers(-(10**16), 10**17), st.integers(0, 2**60), st.none() | st.integers(0, 10**12), st.integers(-(10**16), 10**17))
def test_nothing_is_ever_placed_after_the_minute_of_its_arrival_by_the_server(own_us, uptime_ms, now_ms, now_at_us):
    sending = Sending(NOW_US, now_at_us=now_at_us, now_uptime_ms=now_ms, oldest_stamp_us=own_us)
    state = observe(ClockState(is_server_timed=True), sending)
    placed = place(state, sending, np.array([own_us, NO_TIME]), np.array([NO_UPTIME, min(uptime_ms, 10**12)]))
    good = ~placed.is_impossible
    assert (placed.at_us[good] <= NOW_US + 60 * S).all()
    assert (placed.at_us[good] > NOW_US - 101 * 366 * 86_400 * S).all()


def test_the_fault_is_said_in_words():
    assert clock_fault(Sending(NOW_US, now_at_us=NOW_US - 200 * S)) == "The clock is 3 min behind the server's."
    assert clock_fault(Sending(NOW_US, now_at_us=NOW_US + 61 * S)) == "The clock is 61 s ahead of the server's."
    assert clock_fault(Sending(NOW_US, now_at_us=12 * S)) == "The clock was not set: it says 1970-01-01T00:00:12.000000Z."
    assert clock_fault(Sending(NOW_US, oldest_stamp_us=12 * S)).startswith("The clock was not set: a reading is stamped 1970")
    assert clock_fault(Sending(NOW_US, now_at_us=NOW_US - 60 * S)) == ""
