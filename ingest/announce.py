"""Tells whoever listens that readings were stored; the teller never waits.

Listeners are hints only (the Touch rows are the truth): they run in one background thread, a listener that hangs or
fails delays other hints and nothing else, and announcements made meanwhile become one.
"""

import logging
import threading
from collections.abc import Callable

log = logging.getLogger(__name__)

_listeners: list[Callable[[], object]] = []
_said = threading.Event()
_lock = threading.Lock()
_thread: threading.Thread | None = None
_PAUSE_S = 0.05


def listen(callback: Callable[[], object]) -> None:
    """Call ``callback`` after readings were stored, at most 20 times a second."""
    if callback not in _listeners:
        _listeners.append(callback)


def stop_listening(callback: Callable[[], object]) -> None:
    """Undo ``listen``."""
    if callback in _listeners:
        _listeners.remove(callback)


def announce() -> None:
    """Readings were stored: returns at once."""
    global _thread
    if not _listeners:
        return
    _said.set()
    if _thread is None or not _thread.is_alive():
        with _lock:
            if _thread is None or not _thread.is_alive():
                _thread = threading.Thread(target=_tell, name="announce", daemon=True)
                _thread.start()


def _tell() -> None:
    pause = threading.Event()
    while _said.wait():
        _said.clear()
        for callback in list(_listeners):
            try:
                callback()
            except Exception:  # a hint that fails must not end the hints; whatever was missed is found in Touch
                log.warning("announcement_failed", exc_info=True)
        pause.wait(_PAUSE_S)
