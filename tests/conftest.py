"""What holds for every test: UTC, the real engines (engines_plugin.py), no network beyond this machine."""

import socket

import pytest

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
