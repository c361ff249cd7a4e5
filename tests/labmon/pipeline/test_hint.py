import threading
import time

import pytest
from kombu.exceptions import OperationalError

from labmon.pipeline import hint as hint_module
from labmon.pipeline.hint import Hint
from labmon.pipeline.tasks import process_task


@pytest.fixture(autouse=True)
def hints_of_other_tests_end(monkeypatch):
    """What a door of an earlier test announced may still be on its way in the background."""
    monkeypatch.setattr(Hint, "_is_sent", staticmethod(_in_this_thread(Hint._is_sent, threading.get_ident())))


def _in_this_thread(send, thread):
    return lambda: send() if threading.get_ident() == thread else True


@pytest.fixture
def sent(monkeypatch):
    calls = []
    monkeypatch.setattr(process_task, "apply_async", lambda **options: calls.append((time.monotonic(), options)))
    return calls


def test_hints_are_kept_apart_and_none_is_lost(sent, monkeypatch):
    monkeypatch.setattr(hint_module, "LEAST_APART_S", 0.05)
    hint = Hint()
    for _ in range(4):
        hint()
    times = [at for at, _ in sent]
    assert len(times) == 4 and all(later - earlier >= 0.045 for earlier, later in zip(times, times[1:], strict=False))
    assert sent[0][1] == {"expires": 5.0, "retry": False}


def test_dead_broker_is_left_alone_for_a_while(monkeypatch, caplog):
    tried = []

    def fail(**_):
        tried.append(1)
        raise OperationalError("connection refused")

    monkeypatch.setattr(process_task, "apply_async", fail)
    hint = Hint()
    for _ in range(50):
        hint()
    assert len(tried) == 1 and "hint_failed" in caplog.text


def test_listener_is_connected_to_the_door():
    from ingest import announce

    assert hint_module.ask_for_judging in announce._listeners
