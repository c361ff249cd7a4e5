"""A child dies with its parent, whomever it runs as."""

import os
import signal
import subprocess
import sys
import time

import pytest

from labmon.engines import identity
from labmon.engines.child import SAME, can_reach, start, stop

PARENT = """
import subprocess, sys, time
from labmon.engines.child import Identity, start
child = start(["sleep", "60"], log=subprocess.DEVNULL, identity=Identity(sys.argv[1]))
time.sleep(0.3)
print(child.pid, flush=True)
time.sleep(60)
"""
USERS = ["same"]
if os.geteuid() == 0:
    USERS.append(identity.nobody().user)
if can_reach("/", identity.NAMESPACE):
    USERS.append("namespace")


def is_running(pid):
    try:
        with open(f"/proc/{pid}/stat") as file:
            return file.read().rsplit(")", 1)[1].split()[0] != "Z"
    except FileNotFoundError:
        return False


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="the death signal is Linux's")
@pytest.mark.parametrize("user", USERS)
def test_child_dies_when_its_parent_is_killed(user):
    parent = subprocess.Popen([sys.executable, "-c", PARENT, user], stdout=subprocess.PIPE, text=True)
    pid = int(parent.stdout.readline())
    assert is_running(pid)
    parent.send_signal(signal.SIGKILL)
    parent.communicate()
    until = time.monotonic() + 3.0
    while is_running(pid) and time.monotonic() < until:
        time.sleep(0.02)
    assert not is_running(pid)


def test_stop_kills_what_does_not_listen():
    deaf = start([sys.executable, "-c", "import signal, time; signal.signal(signal.SIGTERM, signal.SIG_IGN); "
                  "print(1, flush=True); time.sleep(60)"], log=subprocess.PIPE)
    assert deaf.stdout.readline() == b"1\n"
    assert not stop(deaf, how=signal.SIGTERM, within_s=0.2)
    assert deaf.poll() == -signal.SIGKILL
    deaf.stdout.close()


def test_reach_is_told(tmp_path):
    assert can_reach(tmp_path, SAME)
    assert not can_reach(tmp_path / "missing", SAME)
