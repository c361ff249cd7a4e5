"""A day's spool (1 tap at 10 Hz, 864,000 readings) is sent and judged: its episodes are those of the fold in one piece.

The day is that of the data: it ends as the sending begins.
"""

import time

import pytest

from tests.faults.bench import await_all_sent, await_judged, make_taps, start_senders
from tests.faults.course import stokes_course, two_port_course
from tests.faults.figures import note_fault
from tests.faults.history import balance, calls_of, episodes_by_fold, episodes_of_span, let_limits_hold_since

pytestmark = pytest.mark.slow

DAY_S, STEP_US = 86_400, 100_000
#: Every hour an alarm of five minutes, a warning that rises, and a dip shorter than the delay.
HOUR = ((30.0, 1500), (18.0, 300), (30.0, 600), (22.0, 60), (18.0, 120), (30.0, 400), (18.0, 2), (30.0, 618))


def test_a_day_of_spool_is_sent_and_judged(lab, visitor):
    tap, _ = taps = make_taps(visitor, "day", (two_port_course(7, 24 * HOUR, STEP_US), stokes_course(8)), STEP_US / 1e6)
    started_us = (time.time_ns() // 1_000_000_000 - DAY_S) * 1_000_000
    let_limits_hold_since(lab, taps, started_us - 60_000_000)
    began_s = time.monotonic()
    senders = start_senders(lab, [tap], seed=91, started_us=started_us, most=10_000, pause_s=0.0)
    await_all_sent(senders, 280.0)
    sent_s = time.monotonic() - began_s
    await_judged(lab)
    took_s = time.monotonic() - began_s
    calls = [call for call in calls_of(lab, taps) if call[1] == "limit"]  # the silence behind the day is of now, and may call
    found, expected = balance(visitor, tap, senders[0]), episodes_by_fold(tap, STEP_US / 1e6)
    told = episodes_of_span(lab, tap, senders[0])
    note_fault("24 h spool replayed", "1 tap at 10 Hz by one HTTP connection, JSON", found,
               calls=f"{len(calls)} of {len(expected)} episodes",
               recovered=f"sent in {sent_s:.0f} s, judged {took_s - sent_s:.1f} s later",
               also=f"wanted ≤ 300 s: {'yes' if took_s <= 300 else 'no'}")
    assert found.is_exact and found.sent == 864_000
    assert told == expected and len(expected) == 48
    assert calls == [], "all of it is past"
