"""A network line between a station and the lab that can be cut: connections break, new ones are refused."""

import contextlib
import socket
import threading


class Line:
    """Passes TCP connections on to a port of this machine, until it is cut.

    Attributes:
        port: Where stations connect; it stays the same when the line is mended.
    """

    def __init__(self, to_port: int) -> None:
        self.to_port = to_port
        self.listener: socket.socket | None = None
        self.ends: list[socket.socket] = []
        self.threads: list[threading.Thread] = []
        self.mend(0)

    def mend(self, port: int | None = None) -> None:
        """Take connections (again)."""
        self.listener = socket.create_server(("127.0.0.1", self.port if port is None else port))
        self.port: int = self.listener.getsockname()[1]
        self._start(self._take, self.listener)

    def cut(self) -> None:
        """Break what goes over the line, in the middle of whatever is under way, and refuse what comes."""
        assert self.listener is not None
        with contextlib.suppress(OSError):
            self.listener.shutdown(socket.SHUT_RDWR)
        self.listener.close()
        for end in self.ends:
            with contextlib.suppress(OSError):
                end.shutdown(socket.SHUT_RDWR)
        for thread in self.threads:
            thread.join()
        for end in self.ends:
            end.close()
        self.ends, self.threads = [], []

    def _start(self, action, *words: socket.socket) -> None:
        thread = threading.Thread(target=action, args=words, daemon=True)
        self.threads.append(thread)
        thread.start()

    def _take(self, listener: socket.socket) -> None:
        while True:
            try:
                near, _ = listener.accept()
            except OSError:
                return
            far = socket.create_connection(("127.0.0.1", self.to_port))
            self.ends += [near, far]
            self._start(_pass_on, near, far)
            self._start(_pass_on, far, near)


def _pass_on(source: socket.socket, sink: socket.socket) -> None:
    with contextlib.suppress(OSError):
        while part := source.recv(1 << 16):
            sink.sendall(part)
    for end in (source, sink):
        with contextlib.suppress(OSError):
            end.shutdown(socket.SHUT_RDWR)
