"""The station's way through HTTP: what is sent, what comes back, what happens when nothing comes back."""

import json
import socket
import threading
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer

import pytest

from labmon.demo.door import Door, NoAnswer


@pytest.fixture
def lab():
    heard = []

    class Handler(BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.1"

        def do_POST(self):
            body = self.rfile.read(int(self.headers["Content-Length"]))
            heard.append((self.path, self.headers["Authorization"], self.headers["Content-Type"], json.loads(body),
                          self.client_address))
            text = b'{"stored": 1}' if len(heard) < 3 else b"busy"
            self.send_response(200 if len(heard) < 3 else 503)
            self.send_header("Content-Length", str(len(text)))
            self.send_header("Retry-After", "7")
            self.end_headers()
            self.wfile.write(text)

        def log_message(self, *args):
            pass

    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    server.daemon_threads = True
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    yield f"http://127.0.0.1:{server.server_port}/", heard
    server.shutdown()
    server.server_close()
    thread.join()


def test_batches_go_through_one_connection_with_the_key(lab):
    address, heard = lab
    door = Door(address, "secret")
    first, second, third = (door.send({"number": number}) for number in range(3))
    door.close()
    assert [answer.status for answer in (first, second, third)] == [200, 200, 503]
    assert (first.body, third.body, third.retry_after_s) == ({"stored": 1}, {}, 7.0)
    assert [entry[:3] for entry in heard] == [("/api/v1/readings", "Bearer secret", "application/json")] * 3
    assert [entry[3] for entry in heard] == [{"number": 0}, {"number": 1}, {"number": 2}]
    assert len({entry[4] for entry in heard}) == 1


def test_a_connection_that_the_lab_closed_is_opened_anew(lab):
    address, heard = lab
    door = Door(address, "secret")
    door.send({"number": 0})
    door.connection.sock.shutdown(socket.SHUT_RDWR)
    assert door.send({"number": 1}).status == 200
    door.close()
    assert [entry[3] for entry in heard] == [{"number": 0}, {"number": 1}]
    assert len({entry[4] for entry in heard}) == 2


def test_a_lab_that_is_away_is_no_answer(lab):
    with pytest.raises(NoAnswer, match="refused"):
        Door("http://127.0.0.1:9/", "secret").send({})


def test_the_key_is_not_shown():
    assert "secret" not in repr(Door("http://127.0.0.1:9/", "secret"))
