"""The real web process (uvicorn on labmon.asgi) for benchmarks."""

import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager


def free_port() -> int:
    """A port nobody listens on just now."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextmanager
def web_process() -> Iterator[tuple[int, int]]:
    """Start it in the current environment; gives (port, pid)."""
    port = free_port()
    process = subprocess.Popen([sys.executable, "-m", "uvicorn", "labmon.asgi:application", "--port", str(port),
                                "--log-level", "warning", "--ws-per-message-deflate", "false"])
    try:
        until = time.monotonic() + 20
        while time.monotonic() < until and process.poll() is None:
            with socket.socket() as probe:
                if probe.connect_ex(("127.0.0.1", port)) == 0:
                    break
            time.sleep(0.05)
        yield port, process.pid
    finally:
        process.terminate()
        process.wait(20)
