"""Hints after a commit: never waited for, conflated, and one that fails harms no other."""

import threading
import time

import pytest

from ingest import announce
from tests.ingest.conftest import two_port


@pytest.fixture
def listening():
    """Listen for the time of a test."""
    begun = []

    def begin(callback):
        begun.append(callback)
        announce.listen(callback)

    yield begin
    for callback in begun:
        announce.stop_listening(callback)


def test_a_commit_is_announced(sender, listening):
    heard = threading.Event()
    listening(heard.set)
    sender.send(two_port())
    assert heard.wait(5)


def test_what_was_known_already_is_no_news(sender, listening):
    sender.send(two_port())
    time.sleep(0.2)
    heard = threading.Event()
    listening(heard.set)
    sender.send(two_port())
    assert not heard.wait(0.3)


def test_the_teller_never_waits_for_a_listener_that_hangs(listening):
    released, calls, ended = threading.Event(), [], []
    listening(lambda: (calls.append(1), released.wait(60), ended.append(1)))
    for _ in range(1000):
        announce.announce()
    assert not ended and len(calls) <= 1    # all was told while the listener hung
    released.set()


def test_a_listener_that_fails_does_not_end_the_hints(listening, caplog):
    heard = threading.Event()

    def fail():
        raise OSError("broker away")

    listening(fail)
    listening(heard.set)
    for _ in range(2):
        heard.clear()
        announce.announce()
        assert heard.wait(5)
    assert "announcement_failed" in caplog.text
