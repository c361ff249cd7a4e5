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


@contextmanager
def web_processes(count: int) -> Iterator[tuple[int, list[int]]]:
    """As many web processes as asked for on one listening socket, as labmon.web serves it; gives (port, pids)."""
    from labmon.web import BACKLOG, bound_socket

    listener = bound_socket("127.0.0.1", free_port())
    listener.listen(BACKLOG)
    number, port = listener.fileno(), int(listener.getsockname()[1])
    processes = [subprocess.Popen([sys.executable, "-m", "labmon.web", "--socket", str(number)], pass_fds=[number])
                 for _ in range(count)]
    try:
        time.sleep(3.0 * count)  # one answering process says nothing of the others
        yield port, [process.pid for process in processes]
    finally:
        for process in processes:
            process.terminate()
            process.wait(20)
        listener.close()
