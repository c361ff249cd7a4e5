"""The broker's start script, run with Debian's mosquitto: waits for labmon's files, reads them again, stops when told."""

import os
import shutil
import socket
import subprocess

import pytest

from ingest.broker_hash import broker_hash_of
from ingest.mqtt.access import rules_for
from tests.docker.files import FOLDER
from tests.running_lab import free_port, until_true

PATH = os.environ.get("PATH", "") + ":/usr/sbin"


def lets_in(port, user, password):
    """Whether mosquitto takes the password: a CONNECT packet of MQTT 3.1.1 by hand, and its answer's return code."""
    def text(word):
        return len(word).to_bytes(2, "big") + word.encode()

    rest = b"\0\4MQTT\4\xc2\0\x3c" + text("t") + text(user) + text(password)
    try:
        with socket.create_connection(("127.0.0.1", port), timeout=5) as wire:
            wire.sendall(b"\x10" + bytes([len(rest)]) + rest)
            return wire.recv(4) == b"\x20\2\0\0"
    except OSError:
        return False


def started(tmp_path, port):
    """The script on the container set's own settings, with this machine's folders."""
    if shutil.which("mosquitto", path=PATH) is None:
        pytest.skip("mosquitto is missing (on Debian: apt-get install mosquitto)")
    text = (FOLDER / "mosquitto.conf").read_text().replace("/access/", f"{tmp_path}/").replace("/mosquitto/data/", f"{tmp_path}/")
    text = text.replace("listener 1883", f"listener {port} 127.0.0.1") + ("user root\n" if os.geteuid() == 0 else "")
    (tmp_path / "mosquitto.conf").write_text(text)
    return subprocess.Popen(["sh", FOLDER / "mqtt-broker.sh"], stderr=subprocess.DEVNULL,
                            env={"PATH": PATH, "ACCESS": str(tmp_path), "SETTINGS": str(tmp_path / "mosquitto.conf")})


@pytest.mark.slow
def test_waits_reads_again_and_stops(tmp_path):
    port = free_port()
    running = started(tmp_path, port)
    try:
        assert not until_true(lambda: lets_in(port, "bench-1", "one"), 1.5) and running.poll() is None
        (tmp_path / "rules").write_text(rules_for("labmon.door"))
        (tmp_path / "passwords").write_text(f"bench-1:{broker_hash_of('one')}\n")
        assert until_true(lambda: lets_in(port, "bench-1", "one"), 10) and not lets_in(port, "bench-1", "two")
        (tmp_path / "passwords").write_text(f"bench-1:{broker_hash_of('two')}\n")
        assert until_true(lambda: lets_in(port, "bench-1", "two"), 10) and not lets_in(port, "bench-1", "one")
        running.terminate()
        assert running.wait(10) == 0 and not lets_in(port, "bench-1", "two")
    finally:
        running.kill()
        running.wait(10)
