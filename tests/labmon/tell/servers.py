"""Real receivers on this machine: an SMTP server, and an HTTP receiver that may fail, hang, or take the same thing again."""

import socket
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from email import message_from_bytes
from email.message import Message
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer

from aiosmtpd.controller import Controller


@dataclass
class Mailbox:
    """What an SMTP server took: envelope and message of each mail; ``refusals`` are answers to give first."""

    mails: list[tuple[list[str], Message]] = field(default_factory=list)
    refusals: list[str] = field(default_factory=list)
    port: int = 0

    async def handle_DATA(self, server, session, envelope):
        if self.refusals:
            return self.refusals.pop(0)
        self.mails.append((list(envelope.rcpt_tos), message_from_bytes(envelope.content)))
        return "250 OK"

    async def handle_RCPT(self, server, session, envelope, address, options):
        if address.startswith("nobody@"):
            return "550 no such user"
        envelope.rcpt_tos.append(address)
        return "250 OK"


@contextmanager
def mail_server() -> Iterator[Mailbox]:
    """A real SMTP server on a free port."""
    box = Mailbox()
    with socket.create_server(("127.0.0.1", 0)) as taken:
        box.port = taken.getsockname()[1]
    controller = Controller(box, hostname="127.0.0.1", port=box.port)
    controller.start()
    try:
        yield box
    finally:
        controller.stop()


@dataclass
class Posted:
    """One request as it came."""

    path: str
    headers: dict[str, str]
    body: bytes


@dataclass
class Receiver:
    """What an HTTP receiver got; ``answers`` are given in turn (a status, or seconds to hang), then 201."""

    answers: list[int | float] = field(default_factory=list)
    got: list[Posted] = field(default_factory=list)
    url: str = ""


@contextmanager
def http_receiver() -> Iterator[Receiver]:
    """A real HTTP server on a free port."""
    receiver, over = Receiver(), threading.Event()

    class Handler(BaseHTTPRequestHandler):
        def do_POST(self):
            body = self.rfile.read(int(self.headers["Content-Length"]))
            receiver.got.append(Posted(self.path, dict(self.headers.items()), body))
            answer = receiver.answers.pop(0) if receiver.answers else 201
            if isinstance(answer, float):
                over.wait(answer)
                answer = 201
            self.send_response(answer)
            self.end_headers()

        def log_message(self, *args):
            pass

    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    thread = threading.Thread(target=server.serve_forever, daemon=True)
    thread.start()
    receiver.url = f"http://127.0.0.1:{server.server_port}"
    try:
        yield receiver
    finally:
        over.set()
        server.shutdown()
        server.server_close()
        thread.join()


