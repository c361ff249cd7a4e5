"""A lab run by ``manage.py run_lab`` as its users run it: its own process, its own folder, a free port."""

import json
import os
import re
import signal
import socket
import subprocess
import sys
import time
import urllib.error
import urllib.request
from collections.abc import Sequence
from pathlib import Path

from labmon.engines import child

PROJECT = Path(__file__).resolve().parents[1]
READY_WITHIN_S = 120.0
STOP_WITHIN_S = 30.0


def clean_environ(**more: str) -> dict[str, str]:
    """Ours without any LABMON_ variable, so that only what is given counts."""
    return {key: value for key, value in os.environ.items() if not key.startswith("LABMON_")} | more


def free_port() -> int:
    """A port nobody has now."""
    with socket.create_server(("127.0.0.1", 0)) as taken:
        return taken.getsockname()[1]


def processes_of(folder: Path) -> list[str]:
    """Command lines of running processes that name the folder, or have it in their environment."""
    found = []
    for process in Path("/proc").glob("[0-9]*"):
        try:
            words = (process / "cmdline").read_bytes()
            environ = (process / "environ").read_bytes()
        except OSError:
            continue
        mark = os.fsencode(folder)
        if int(process.name) != os.getpid() and words and (mark in words or b"LABMON_DATA=" + mark + b"\0" in environ):
            found.append(f"{process.name} {words.replace(bytes(1), b' ').decode(errors='replace').strip()}")
    return found


def until_true(question, within_s: float) -> bool:
    """Ask until the answer is true or the time is over."""
    until = time.monotonic() + within_s
    while time.monotonic() < until:
        if question():
            return True
        time.sleep(0.1)
    return False


class RunningLab:
    """One ``run_lab``.

    Args:
        folder: Data folder.
        words: More words of the command line.
        environ: Its whole environment; default ours without LABMON_ variables.
        prefix: A command that runs it (to change user).
    """

    def __init__(self, folder: Path, *words: str, environ: dict[str, str] | None = None,
                 prefix: Sequence[str] = ()) -> None:
        self.folder = folder
        self.port = free_port()
        self.lines: list[str] = []
        self.process = subprocess.Popen(
            child.launched([*prefix, sys.executable, PROJECT / "manage.py", "run_lab", "--data", folder, "--port", str(self.port),
                            *words]),
            cwd=PROJECT, env=environ or clean_environ(), stdin=subprocess.DEVNULL, stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT, text=True, start_new_session=True)

    def __enter__(self) -> "RunningLab":
        return self

    def __exit__(self, *fault: object) -> None:
        if self.process.poll() is None:
            self.process.kill()
        self.process.communicate()

    def read_until(self, pattern: str) -> str:
        """Read its lines up to one that matches.

        Raises:
            AssertionError: It ended before; the message has all it said.
        """
        assert self.process.stdout is not None
        for line in self.process.stdout:
            self.lines.append(line)
            if re.search(pattern, line):
                return line
        raise AssertionError(f"run_lab ended with {self.process.wait()}:\n{self.said}")

    def await_ready(self) -> float:
        """Seconds it says it took."""
        return float(re.search(r"Ready after ([\d.]+) s", self.read_until("Ready after"))[1])

    @property
    def said(self) -> str:
        """All lines read so far."""
        return "".join(self.lines)

    @property
    def services(self) -> dict[str, str]:
        """What it wrote down for other commands."""
        return json.loads((self.folder / "services.json").read_text())

    def pid_of(self, words: str) -> int:
        """Number of the child whose command line contains ``words``; the oldest of several."""
        found = [int(line.split()[0]) for line in processes_of(self.folder) if words in line]
        assert found, f"no process with {words!r} in {processes_of(self.folder)}"
        return min(found)

    def stop(self, how: signal.Signals = signal.SIGINT) -> float:
        """Ask it to stop; seconds it took."""
        began_s = time.monotonic()
        self.process.send_signal(how)
        rest, _ = self.process.communicate(timeout=STOP_WITHIN_S)
        self.lines.append(rest)
        return time.monotonic() - began_s

    def status(self, path: str) -> int:
        """HTTP status of a page; 0 where nobody answers."""
        try:
            with urllib.request.urlopen(f"http://127.0.0.1:{self.port}{path}", timeout=5) as answer:
                return answer.status
        except urllib.error.HTTPError as error:
            error.close()
            return error.code
        except OSError:
            return 0


def manage(*words: str, folder: Path) -> str:
    """Output of another command on the lab of ``folder``."""
    done = subprocess.run([sys.executable, str(PROJECT / "manage.py"), *words, "--data", str(folder)], text=True,
                          capture_output=True, env=clean_environ(), cwd=PROJECT, stdin=subprocess.DEVNULL)
    assert done.returncode == 0, done.stderr
    return done.stdout
