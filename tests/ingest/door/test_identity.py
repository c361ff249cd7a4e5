"""Repeats, re-cut batches, and answers that count exactly (CONTRACT.md, sections 1 and 5)."""

import random

import pytest

from ingest.models import InboxRow, SetAside, TapHeard, Touch
from ingest.store.seal import seal_inbox, seal_tap
from tests.ingest.conftest import two_port

SEALED = pytest.mark.parametrize("is_sealed", [False, True], ids=["in the inbox", "in blocks"])


def counts(answer):
    return answer["stored"], answer["known"], len(answer["set_aside"])


def test_a_batch_sent_twice_and_shuffled_is_stored_once(sender):
    """JOB.md, section 7a: a batch of 100 rows sent twice, shuffled: 100 rows stored, same numbers."""
    body = two_port(0, 100)
    assert counts(sender.send(body)) == (100, 0, 0)
    order = random.Random(5).sample(range(100), 100)
    shuffled = {name: [column[row] for row in order] for name, column in body["taps"]["eom-in"].items()}
    assert counts(sender.send(body | {"taps": {"eom-in": shuffled}})) == (0, 100, 0)
    stored = sender.stored()
    assert stored.sequence.tolist() == list(range(100))
    assert stored.column("port1").tolist() == body["taps"]["eom-in"]["port1"]


@SEALED
def test_a_re_cut_batch_stores_only_what_is_new(sender, is_sealed):
    sender.send(two_port(10, 10))
    if is_sealed:
        seal_tap(sender.tap().pk)
    answer = sender.send(two_port(5, 20))
    assert counts(answer) == (10, 10, 0) and answer["through"] == {"eom-in": 24}
    assert sender.stored().sequence.tolist() == list(range(5, 25))


@SEALED
def test_the_same_identity_with_other_values_is_set_aside_and_the_first_stays(sender, is_sealed):
    sender.send(two_port(0, 4))
    if is_sealed:
        seal_tap(sender.tap().pk)
    body = two_port(0, 4)
    body["taps"]["eom-in"]["port2"][2] = 5e-6
    answer = sender.send(body)
    assert counts(answer) == (0, 3, 1) and answer["set_aside"][0]["row"] == 2 and answer["set_aside"][0]["field"] == "sequence"
    assert answer["accepted"]["ranges"] == {"eom-in": [[0, 3]]}
    assert sender.stored().column("port2")[2] == 1e-6 + 2e-12
    assert SetAside.objects.get().reading["port2"] == 5e-6


@SEALED
def test_readings_known_by_their_time_are_stored_once(sender, is_sealed):
    body = two_port(0, 5)
    del body["boot"], body["taps"]["eom-in"]["sequence"]
    assert counts(sender.send(body)) == (5, 0, 0)
    if is_sealed:
        seal_tap(sender.tap().pk)
    assert counts(sender.send(body)) == (0, 5, 0)
    more = {name: values + [values[-1] + (1_000_000 if name == "at" else 0)] for name, values in body["taps"]["eom-in"].items()}
    more["port1"][0] = 9.0
    answer = sender.send({"taps": {"eom-in": more}})
    assert counts(answer) == (1, 4, 1) and answer["set_aside"][0]["field"] == "at"
    assert len(sender.stored()) == 6 and answer["accepted"] == {"boot": None, "ranges": {}} and answer["through"] == {}


def test_without_sequence_the_time_is_the_identity_across_boots(sender):
    body = two_port(0, 3)
    del body["taps"]["eom-in"]["sequence"]
    sender.send(body)
    assert counts(sender.send(body | {"boot": "another"})) == (0, 3, 0)


def test_a_clockless_reading_without_boot_sent_again_is_known(sender):
    body = {"now": {"uptime_ms": 9_000}, "taps": {"eom-in": {"uptime_ms": [8_000], "port1": [1e-3], "port2": [1e-6]}}}
    assert counts(sender.send(body)) == (1, 0, 0)
    body["now"]["uptime_ms"] = 9_400
    assert counts(sender.send(body)) == (0, 1, 0)


def test_different_readings_at_one_instant_are_different_readings(sender):
    body = two_port(0, 3)
    body["taps"]["eom-in"]["at"] = ["2031-03-04T02:11:05Z"] * 3
    assert counts(sender.send(body)) == (3, 0, 0)
    assert counts(sender.send(two_port(0, 3, boot="other") | {"taps": body["taps"]})) == (3, 0, 0)
    assert len(sender.stored()) == 6


def test_two_boots_with_the_same_numbers_are_kept_apart(sender):
    """JOB.md, section 7a: two devices on one key, two boot ids interleaved: both kept."""
    for first in (0, 10):
        sender.send(two_port(first, 10, boot="one"))
        sender.send(two_port(first, 10, boot="two"))
    stored = sender.stored()
    assert len(stored) == 40 and len(set(stored.boot_id.tolist())) == 2
    assert len(set(zip(stored.boot_id.tolist(), stored.sequence.tolist(), strict=True))) == 40


def test_a_number_twice_in_one_batch(sender):
    body = two_port(0, 3)
    columns = {name: [*values, values[1], values[1]] for name, values in body["taps"]["eom-in"].items()}
    columns["port1"][4] = 0.5
    answer = sender.send(body | {"taps": {"eom-in": columns}})
    assert counts(answer) == (3, 1, 1) and answer["set_aside"][0]["row"] == 4


def test_the_same_instant_twice_in_one_batch_without_sequence(sender):
    answer = sender.send({"taps": {"eom-in": {"at": [2 * 10**15] * 3, "port1": [1, 1, 2], "port2": [1, 1, 1]}}})
    assert counts(answer) == (1, 1, 1)


def test_repeats_that_wait_together_are_told_apart(sender):
    """Batches of one group commit know of each other."""
    bodies = [two_port(first, 10) for first in (0, 5, 0, 10, 3)] + [two_port(0, 12, boot="other")]
    answers = [response.json() for response in sender.together(bodies)]
    assert sum(answer["stored"] for answer in answers) == 20 + 12
    assert all(
        answer["stored"] + answer["known"] == len(body["taps"]["eom-in"]["at"])
        for answer, body in zip(answers, bodies, strict=True)
    )
    assert len(sender.stored()) == 32


def test_unstamped_repeats_that_wait_together_are_told_apart(sender):
    body = two_port(0, 10)
    del body["boot"], body["taps"]["eom-in"]["sequence"]
    answers = [response.json() for response in sender.together([body] * 5)]
    assert sorted(answer["stored"] for answer in answers) == [0, 0, 0, 0, 10] and len(sender.stored()) == 10


def test_some_readings_numbered_and_some_not(sender):
    body = two_port(0, 4)
    body["taps"]["eom-in"]["sequence"] = [0, None, 2, None]
    answer = sender.send(body)
    assert counts(answer) == (4, 0, 0) and answer["accepted"]["ranges"] == {"eom-in": [[0, 0], [2, 2]]}
    assert counts(sender.send(body)) == (0, 4, 0)


def test_accepted_lists_exactly_the_ranges_of_this_batch(sender):
    sender.send(two_port(0, 10))
    body = two_port(0, 8)
    body["taps"]["eom-in"]["sequence"] = [20, 21, 22, 30, 31, 5, 6, 40]
    answer = sender.send(body)
    assert answer["accepted"] == {"boot": "7f3a", "ranges": {"eom-in": [[5, 6], [20, 22], [30, 31], [40, 40]]}}


def test_through_stops_at_the_first_hole_and_goes_on_when_it_is_filled(sender):
    assert sender.send(two_port(100, 5))["through"] == {"eom-in": 104}
    assert sender.send(two_port(110, 5))["through"] == {"eom-in": 104}
    assert sender.send(two_port(105, 5))["through"] == {"eom-in": 114}


def test_through_counts_from_the_boots_first_number(sender):
    sender.send(two_port(100, 5))
    assert sender.send(two_port(50, 10))["through"] == {"eom-in": 59}
    assert sender.send(two_port(60, 40))["through"] == {"eom-in": 104}


def test_through_never_reaches_beyond_what_was_refused(sender):
    refused = two_port(0, 5)
    refused["taps"]["eom-in"]["port2"].pop()
    assert sender.post(refused).status_code == 400
    answer = sender.send(two_port(5, 5))
    assert answer["through"] == {} and answer["accepted"]["ranges"] == {"eom-in": [[5, 9]]}
    assert sender.send(two_port(0, 5))["through"] == {"eom-in": 9}


def test_a_reading_set_aside_counts_as_held(sender):
    body = two_port(0, 5)
    body["taps"]["eom-in"]["port2"][4] = None
    assert sender.send(body)["through"] == {"eom-in": 4}
    assert sender.send(two_port(5, 5))["through"] == {"eom-in": 9}


def test_a_reading_set_aside_is_counted_again_but_listed_once(sender):
    body = two_port(0, 3)
    body["taps"]["eom-in"]["port1"][1] = None
    assert counts(sender.send(body)) == (2, 0, 1)
    assert counts(sender.send(body)) == (0, 2, 1)
    assert SetAside.objects.count() == 1


def test_a_number_that_was_set_aside_does_not_come_back_with_a_value(sender):
    body = two_port(0, 3)
    body["taps"]["eom-in"]["port1"][1] = None
    sender.send(body)
    answer = sender.send(two_port(0, 3))
    assert counts(answer) == (0, 2, 1) and "set aside before" in answer["set_aside"][0]["why"]
    assert sender.stored().sequence.tolist() == [0, 2]


def test_a_repeat_leaves_no_mark_and_is_no_news(sender):
    sender.send(two_port(0, 5))
    marks, heard = Touch.objects.count(), TapHeard.objects.get().last_arrival_us
    sender.send(two_port(0, 5))
    assert (Touch.objects.count(), TapHeard.objects.get().last_arrival_us, InboxRow.objects.count()) == (marks, heard, 1)


def test_repeats_after_sealing_cost_no_new_rows(sender):
    sender.send(two_port(0, 50))
    assert seal_inbox(after_s=-1) == 1
    assert counts(sender.send(two_port(0, 50))) == (0, 50, 0) and not InboxRow.objects.exists()


def test_other_unknown_values_are_other_values(sender):
    sender.send(two_port(0, 2, note=["a", "b"]))
    assert counts(sender.send(two_port(0, 2, note=["a", "c"]))) == (0, 1, 1)
