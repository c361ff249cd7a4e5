"""What holds for every test: UTC, the real engines (engines_plugin.py), collected static files, no network beyond here."""

import fcntl
import shutil
import socket
from pathlib import Path

import pytest
from hypothesis import settings

BUILD = Path(__file__).resolve().parents[1] / ".build"
#: A machine that is busy is no fault of a test.
settings.register_profile("labmon", deadline=None)
settings.load_profile("labmon")
NEAR = {"localhost", "127.0.0.1", "::1", "0.0.0.0", ""}


class NetworkRefused(Exception):
    """A test wanted to leave this machine."""


@pytest.fixture(autouse=True, scope="session")
def no_network():
    """Sockets reach this machine only."""
    true_connect = socket.socket.connect

    def near_connect(self: socket.socket, address):
        if self.family in {socket.AF_INET, socket.AF_INET6} and address[0] not in NEAR:
            raise NetworkRefused(f"connect to {address}")
        return true_connect(self, address)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(socket.socket, "connect", near_connect)
        yield


@pytest.fixture(autouse=True, scope="session")
def collected_static():
    """The static files as they are served, collected once for each state of them, outside any data folder."""
    from django.core.management import call_command
    from django.test import override_settings

    from labmon.engines.prepare import static_state

    kept = BUILD / "static"
    kept.mkdir(parents=True, exist_ok=True)
    root = kept / static_state()[:16]
    with (kept / "lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        if not root.is_dir():
            part = kept / "part"
            shutil.rmtree(part, ignore_errors=True)
            with override_settings(STATIC_ROOT=part):
                call_command("collectstatic", verbosity=0, interactive=False)
            part.rename(root)
    with override_settings(STATIC_ROOT=root):
        yield root
