"""The worker's command, as the supervisor and the container set start it."""

import subprocess
import sys

import pytest

from tests.running_lab import PROJECT


def run(*words):
    return subprocess.run([sys.executable, "-m", "labmon.worker", *words], cwd=PROJECT, capture_output=True, text=True,
                          check=False)


def test_it_wants_to_know_its_lane():
    done = run("slow")
    assert done.returncode == 2 and "invalid Lane value" in done.stderr


@pytest.mark.parametrize("lane", ["prompt", "long"])
def test_ping_says_that_nobody_answers(lane):
    done = run(lane, "--ping")
    assert done.returncode == 1 and f"{lane}@" in done.stderr and "does not answer" in done.stderr
