"""The session's own promises."""

import os
import socket
import time

import pytest
from django.templatetags.static import static

from tests.conftest import NetworkRefused


def test_network_is_refused_beyond_this_machine():
    with socket.socket() as far, pytest.raises(NetworkRefused):
        far.connect(("192.0.2.1", 80))


def test_clock_is_utc():
    assert os.environ["TZ"] == "UTC"
    assert time.tzname[0] == "UTC"



def test_static_files_are_named_by_their_content(collected_static):
    name = static("labmon/mark.svg").removeprefix("/static/")
    assert name != "labmon/mark.svg"
    assert (collected_static / name).is_file()
