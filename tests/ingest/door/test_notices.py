"""What the door notices of keys: bounded, in words, and never in a request's way."""

import threading

import pytest

from ingest.door import notices
from ingest.door.notices import Notices, drain, listen, note_refused, note_used, stop_listening
from ingest.door.refusal import bad_form, come_again, no_entry
from ingest.stations import digest_of
from tests.ingest.conftest import two_port

KEY = "x7fQ" + "a" * 39
WRONG = no_entry("the key is not known", "Use the station's current key.")


@pytest.fixture
def heard(monkeypatch):
    """What was handed on; nothing is left for other tests."""
    found: list[Notices] = []
    came = threading.Event()

    def take(notices: Notices) -> None:
        found.append(notices)
        came.set()

    monkeypatch.setattr(notices, "PAUSE_S", 0.0)
    listen(take)
    yield found, came
    stop_listening(take)


@pytest.fixture
def kept(monkeypatch):
    """Somebody listens, but the thread does not run: what was noticed stays to be looked at."""
    monkeypatch.setattr(notices, "_tell_soon", lambda: None)
    listen(print)
    yield
    stop_listening(print)


def test_the_same_wrong_key_is_one_notice_with_a_count(kept):
    for _ in range(5):
        note_refused(KEY, "192.0.2.7", WRONG)
    (found,) = drain().refused.values()
    assert (found.count, found.hint, found.remote_address, found.title) == (5, "x7fQ", "192.0.2.7", "the key is not known")
    assert found.digest == digest_of(KEY) and found.first_us <= found.last_us


def test_a_flood_of_wrong_keys_stays_bounded(kept):
    for number in range(10 * notices.MOST):
        note_refused(f"{number:043d}", "192.0.2.7", WRONG)
    found = drain()
    assert len(found.refused) == notices.MOST and found.left_out == 9 * notices.MOST


def test_nothing_is_kept_of_what_may_be_a_password(kept):
    note_refused("hunter2", "192.0.2.7", WRONG)
    (found,) = drain().refused.values()
    assert found.hint == ""


def test_being_told_to_come_again_is_no_notice(kept):
    note_refused(KEY, "192.0.2.7", come_again(503, "the database is away", 5))
    assert drain().refused == {}


def test_what_was_refused_is_told_with_its_field(kept):
    note_refused(KEY, "", bad_form("station 'b' has no tap 'eom_in'", "Check the name.", "taps.eom_in"))
    (found,) = drain().refused.values()
    assert (found.status, found.field) == (400, "taps.eom_in")


def test_a_key_in_steady_use_is_told_of_now_and_then(kept):
    for _ in range(100):
        note_used(KEY, "192.0.2.7")
    assert list(drain().used) == [digest_of(KEY)]
    note_used(KEY, "192.0.2.7")
    assert drain().used == {}


def test_where_nobody_listens_nothing_is_kept():
    note_used(KEY, "")
    note_refused(KEY, "", WRONG)
    assert drain() == Notices()


def test_the_door_tells_of_good_and_wrong_keys(sender, heard):
    found, came = heard
    sender.send(two_port())
    assert came.wait(10)
    came.clear()
    assert sender.post(two_port(1), headers={"Authorization": f"Bearer {KEY}"}).status_code == 401
    assert came.wait(10)
    used = {digest for one in found for digest in one.used}
    refused = [refusal for one in found for refusal in one.refused.values()]
    assert used == {digest_of(sender.key)}
    assert [(one.hint, one.title) for one in refused] == [("x7fQ", "the key is not known")]
