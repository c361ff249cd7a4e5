"""The listening socket."""

import socket

import pytest

from labmon.web import bound_socket


@pytest.mark.parametrize("listen", ["127.0.0.1", "::1"])
def test_socket_is_bound_in_its_family(listen):
    with bound_socket(listen, 0) as bound:
        assert bound.getsockname()[0] == listen
        assert bound.getsockname()[1] > 0


def test_taken_port_is_an_error_and_leaves_nothing_open():
    with socket.create_server(("127.0.0.1", 0)) as taken, pytest.raises(OSError):
        bound_socket("127.0.0.1", taken.getsockname()[1])
