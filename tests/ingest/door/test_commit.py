"""The time rules of CONTRACT.md, section 1, from outside."""

import time

import pytest

from ingest.models import StationBoot, Touch
from ingest.store.columns import NO_TIME
from ingest.times import now_us, rfc3339_of

S = 1_000_000


def body(columns, *, boot="7f3a", **now):
    count = len(next(iter(columns.values())))
    return {"boot": boot, "now": now, "taps": {"eom-in": {"port1": [1e-3] * count, "port2": [1e-6] * count} | columns}}


def test_a_good_clock_is_believed_and_its_offset_shown_not_shifted(sender):
    at_us = now_us() - 10 * S
    sender.send(body({"sequence": [1], "at": [rfc3339_of(at_us)]}, at=rfc3339_of(now_us() - 5 * S)))
    stored = sender.stored()
    boot = StationBoot.objects.get()
    assert stored.at_us.tolist() == stored.own_at_us.tolist() == [at_us]
    assert not stored.is_server_timed.any() and not boot.is_server_timed and boot.clock_fault == ""
    assert 5 * S <= boot.clock_offset_us < 6 * S


def test_the_offset_is_the_smallest_seen_in_the_boot(sender):
    for number, behind_s in enumerate((3, 1, 9)):
        sender.send(body({"sequence": [number], "at": [now_us()]}, at=now_us() - behind_s * S))
    assert S <= StationBoot.objects.get().clock_offset_us < 2 * S


def test_without_now_the_clock_is_not_checked(sender):
    sender.send(
        {"boot": "a", "taps": {"eom-in": {"sequence": [1], "at": ["2031-03-04T02:11:05.120Z"], "port1": [1], "port2": [2]}}}
    )
    assert sender.stored().at_us.tolist() == [1_930_356_665_120_000] and not StationBoot.objects.get().is_server_timed


def test_at_may_be_text_with_any_zone_or_whole_microseconds(sender):
    sender.send(body({"at": ["2031-03-04T03:11:05.12+01:00", 1_930_356_665_120_001, "2031-03-03t21:11:05.120002-05:00"]}))
    assert sender.stored().at_us.tolist() == [1_930_356_665_120_000 + step for step in range(3)]


def test_without_at_the_uptime_tells_the_time(sender):
    before = now_us()
    sender.send(body({"sequence": [1, 2], "uptime_ms": [7_310_070, 7_311_070]}, uptime_ms=7_312_450))
    stored = sender.stored()
    assert stored.is_server_timed.all() and (stored.own_at_us == NO_TIME).all()
    assert abs(stored.at_us[1] - (before - 1_380_000)) < S and stored.at_us[1] - stored.at_us[0] == S
    assert stored.lateness_us.tolist() == [2_380_000, 1_380_000]
    assert stored.column("uptime_ms").tolist() == [7_310_070, 7_311_070]


def test_placing_is_steadied_by_the_smallest_offset_of_the_boot(sender):
    """A batch that was held up for two seconds on its way is placed as if it had not been."""
    sender.send(body({"sequence": [1], "uptime_ms": [100_000]}, uptime_ms=100_000))
    first = sender.stored().at_us[0]
    sender.send(body({"sequence": [2], "uptime_ms": [98_500]}, uptime_ms=98_000))
    assert abs(sender.stored().at_us[0] - (first - 1_500_000)) < S // 10


def test_a_32_bit_uptime_that_wrapped_counts_on(sender):
    wrap = 1 << 32
    sender.send(body({"sequence": [1], "uptime_ms": [wrap - 2_000]}, uptime_ms=wrap - 1_000))
    sender.send(body({"sequence": [2, 3, 4], "uptime_ms": [wrap - 500, 500, 900]}, uptime_ms=1_000))
    at_us = dict(zip(sender.stored().sequence.tolist(), sender.stored().at_us.tolist(), strict=True))
    assert abs(at_us[4] - (now_us() - 100_000)) < S
    assert [at_us[number] - at_us[2] for number in (2, 3, 4)] == [0, S, 1_400_000]
    assert StationBoot.objects.get().uptime_last_ms == wrap + 1_000


def test_an_uptime_counter_that_began_anew_is_anchored_anew(sender):
    sender.send(body({"sequence": [1], "uptime_ms": [9_000_000]}, uptime_ms=9_000_000))
    sender.send(body({"sequence": [2], "uptime_ms": [500]}, uptime_ms=1_000))
    assert abs(sender.stored().at_us.max() - now_us()) < 2 * S and sender.stored().at_us.min() > now_us() - 5 * S


@pytest.mark.parametrize("offset_s", [-61, 61, 3_600, -86_400])
def test_a_clock_off_by_more_than_60_s_makes_the_whole_boot_server_timed(sender, offset_s):
    wrong = now_us() + offset_s * S
    sender.send(body({"sequence": [1], "at": [wrong - 3 * S]}, at=wrong))
    sender.send(body({"sequence": [2], "at": [wrong - 1 * S]}, at=wrong))
    stored, boot = sender.stored(), StationBoot.objects.get()
    assert stored.is_server_timed.all() and boot.is_server_timed
    assert ("ahead of" if offset_s > 0 else "behind") in boot.clock_fault
    assert stored.own_at_us.tolist() == [wrong - 3 * S, wrong - 1 * S]
    assert abs(stored.at_us[0] - (now_us() - 3 * S)) < S and abs(stored.at_us[1] - (now_us() - 1 * S)) < S


@pytest.mark.parametrize("offset_s", [-58, 58])
def test_a_clock_off_by_less_is_not_at_fault(sender, offset_s):
    sender.send(body({"sequence": [1], "at": [now_us()]}, at=now_us() + offset_s * S))
    assert not StationBoot.objects.get().is_server_timed


def test_a_boot_stays_server_timed_when_its_clock_is_set_right(sender):
    sender.send(
        body(
            {"sequence": [1], "uptime_ms": [12_000], "at": ["1970-01-01T00:00:12Z"]}, uptime_ms=13_000, at="1970-01-01T00:00:13Z"
        )
    )
    sender.send(body({"sequence": [2], "uptime_ms": [14_000], "at": [now_us()]}, uptime_ms=14_500, at=now_us()))
    stored, boot = sender.stored(), StationBoot.objects.get()
    assert stored.is_server_timed.all() and boot.is_server_timed and "not set" in boot.clock_fault
    assert (abs(stored.at_us - (now_us() - S)) < S).all()


def test_1970_clock_with_uptimes_is_placed_within_1_s_by_arrival(sender):
    """JOB.md, section 7a: wall time 1970-01-01T00:00:12Z with uptimes, placed within 1 s by arrival; flagged."""
    expected = now_us() - 2 * S
    sender.send(
        body(
            {"sequence": [1], "at": ["1970-01-01T00:00:12Z"], "uptime_ms": [12_345]}, uptime_ms=14_345, at="1970-01-01T00:00:14Z"
        )
    )
    stored = sender.stored()
    assert abs(stored.at_us[0] - expected) < S and stored.is_server_timed[0] and stored.own_at_us[0] == 12 * S
    assert "1970-01-01T00:00:12" in StationBoot.objects.get().clock_fault


def test_a_stamp_before_2020_makes_the_boot_server_timed_even_without_now(sender):
    sender.send(
        {
            "boot": "a",
            "taps": {
                "eom-in": {
                    "sequence": [1, 2],
                    "at": ["2019-12-31T23:59:58Z", "2019-12-31T23:59:59Z"],
                    "port1": [1, 1],
                    "port2": [2, 2],
                }
            },
        }
    )
    stored = sender.stored()
    assert stored.is_server_timed.all() and abs(stored.at_us[1] - now_us()) < 2 * S and stored.at_us[1] - stored.at_us[0] == S


def test_a_stamp_of_2020_is_believed(sender):
    sender.send({"boot": "a", "taps": {"eom-in": {"sequence": [1], "at": ["2020-01-01T00:00:00Z"], "port1": [1], "port2": [2]}}})
    assert sender.stored().at_us.tolist() == [1_577_836_800 * S]


def test_a_clock_set_between_measuring_and_sending_does_not_place_readings_decades_back(sender):
    sender.send(body({"sequence": [1, 2], "at": ["1970-01-01T00:00:12Z", "1970-01-01T00:00:14Z"]}, at=now_us()))
    stored = sender.stored()
    assert abs(stored.at_us[1] - now_us()) < 2 * S and stored.at_us[1] - stored.at_us[0] == 2 * S


def test_another_boot_is_judged_by_its_own_clock(sender):
    sender.send(body({"sequence": [1], "at": ["1970-01-01T00:00:12Z"]}, boot="first", at="1970-01-01T00:00:13Z"))
    sender.send(body({"sequence": [1], "at": [now_us()]}, boot="second", at=now_us()))
    assert dict(StationBoot.objects.values_list("boot", "is_server_timed")) == {"first": True, "second": False}


def test_without_boot_id_each_body_is_judged_by_itself(sender):
    sender.send(body({"at": ["1970-01-01T00:00:12Z"]}, boot=None, at="1970-01-01T00:00:13Z"))
    sender.send(body({"at": [now_us()]}, boot=None, at=now_us()))
    assert sorted(sender.stored().is_server_timed.tolist()) == [False, True]


def test_lateness_is_told_by_the_stations_own_clock(sender):
    """A clock 50 s behind must not make fresh readings look 50 s late."""
    slow = now_us() - 50 * S
    sender.send(body({"sequence": [1, 2], "at": [slow - 7 * S, slow]}, at=slow))
    assert sender.stored().lateness_us.tolist() == [7 * S, 0]


def test_without_now_lateness_is_counted_from_arrival(sender):
    sender.send(body({"sequence": [1], "at": [now_us() - 3600 * S]}))
    assert abs(sender.stored().lateness_us[0] - 3600 * S) < 5 * S


def test_a_reading_with_nothing_but_values_lies_at_arrival(sender):
    before = now_us()
    sender.send({"taps": {"eom-in": {"port1": [1e-3], "port2": [1e-6]}}})
    assert before <= sender.stored().at_us[0] <= now_us() and sender.stored().is_server_timed.all()


def test_two_readings_with_nothing_but_values_are_refused(sender):
    response = sender.post({"taps": {"eom-in": {"port1": [1e-3, 1e-3], "port2": [1e-6, 1e-6]}}})
    assert response.status_code == 400 and response.json()["field"] == "taps.eom-in.at"


def test_readings_with_sequence_only_lie_at_arrival_in_their_order(sender):
    sender.send({"boot": "a", "taps": {"eom-in": {"sequence": [3, 4], "port1": [1e-3, 2e-3], "port2": [1e-6, 1e-6]}}})
    stored = sender.stored()
    assert stored.sequence.tolist() == [3, 4] and len(set(stored.at_us.tolist())) == 1


def test_uptimes_without_now_uptime_are_refused_with_the_remedy(sender):
    response = sender.post(body({"sequence": [1], "uptime_ms": [5]}))
    assert response.status_code == 400 and response.json()["field"] == "now.uptime_ms"


def test_an_uptime_well_after_now_is_set_aside(sender):
    answer = sender.send(body({"sequence": [1, 2], "uptime_ms": [500_000, 900]}, uptime_ms=1_000))
    assert answer["stored"] == 1 and [(aside["row"], aside["field"]) for aside in answer["set_aside"]] == [(0, "uptime_ms")]


def test_stamped_and_unstamped_readings_may_come_together(sender):
    at = now_us() - S
    sender.send(body({"sequence": [1, 2], "at": [at, None], "uptime_ms": [None, 9_000]}, uptime_ms=9_500, at=now_us()))
    stored = sender.stored()
    assert stored.is_server_timed.tolist() == [False, True] and stored.at_us[0] == at
    assert abs(stored.at_us[1] - (now_us() - S // 2)) < S


def test_touches_of_readings_far_apart_do_not_span_the_time_between(sender):
    year = 365 * 86_400 * S
    sender.send(body({"sequence": [1, 2], "at": [now_us() - year, now_us()]}))
    assert Touch.objects.count() == 2 and all(mark.last_at_us - mark.first_at_us < S for mark in Touch.objects.all())


def test_arrival_is_the_servers_clock(sender):
    before = time.time_ns() // 1000
    sender.send(body({"sequence": [1], "at": [now_us()]}))
    assert before <= sender.stored().arrival_us[0] <= time.time_ns() // 1000
