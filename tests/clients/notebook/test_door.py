"""The way to labmon and back: busy, away, broken off, slow, not labmon at all."""

import io
import socket
import threading

import pyarrow as pa
import pytest
from labmon_notebook.door import Door
from labmon_notebook.faults import LabAway, LabFault, NotAllowed, WrongQuestion
from labmon_notebook.lab import Lab
from labmon_notebook.readings import NotKept

from tests.ingest.door.test_over_uvicorn import free_port, server

BUSY = (503, {"Retry-After": "5"}, b'{"title": "The database is away.", "detail": "Wait.", "status": 503}')


def test_a_busy_labmon_is_asked_again_after_the_wait_it_names(near):
    near._door.faults = [BUSY, BUSY]
    assert len(near.stations()) == 2 and near._door.waits == [5.0, 5.0]


def test_it_gives_up_with_labmons_own_words(near):
    near._door.faults = [BUSY] * 3
    with pytest.raises(LabAway, match="The database is away. Wait."):
        near.stations()
    assert near._door.waits == [5.0, 5.0]


def test_a_long_retry_after_is_not_sat_out(near):
    near._door.faults = [(429, {"Retry-After": "86400"}, b"{}")]
    near.stations()
    assert near._door.waits == [30.0]


@pytest.mark.parametrize(("fault", "kind", "words"), [
    ((403, {}, b'{"title": "Your role does not allow this.", "detail": "Ask a manager."}'), NotAllowed, "Ask a manager"),
    ((404, {}, b"<h1>nginx</h1>"), LabFault, "labmon's own address"),
    ((302, {"Location": "http://elsewhere.example/"}, b""), LabFault, "302"),
    ((200, {}, b"<h1>welcome</h1>"), LabAway, "did not answer with JSON"),
    (ConnectionRefusedError(), LabAway, "Nobody listens"),
    (TimeoutError(), LabAway, "in time"),
    (socket.gaierror(), LabAway, "spelling"),
])
def test_other_faults_say_what_to_look_at(near, fault, kind, words):
    near._door.faults = [fault]
    with pytest.raises(kind, match=words):
        near.stations()
    assert len(near._door.asked) == 1, "a redirect is not followed: the key goes nowhere else"


@pytest.mark.parametrize("address", ["labmon.example", "ftp://labmon.example", "http://labmon.example/lab/", "http://"])
def test_an_address_that_is_none_is_refused(address):
    with pytest.raises(ValueError, match="http://labmon.example:8000"):
        Door(address, "person-abc")


def one_answer(answer: bytes):
    """A port where one caller gets these bytes and then nothing more."""
    listener = socket.create_server(("127.0.0.1", 0))

    def serve():
        with listener, listener.accept()[0] as caller:
            caller.recv(65536)
            caller.sendall(answer)

    threading.Thread(target=serve, daemon=True).start()
    return listener.getsockname()[1]


def arrow_stream(*batches, metadata=b'{"tap": "bench-a/in"}'):
    schema = pa.schema([("at", pa.timestamp("us", tz="UTC")), ("er_db", pa.float64())], {b"labmon": metadata})
    sink = io.BytesIO()
    with pa.ipc.new_stream(sink, schema) as writer:
        for count in batches:
            at = pa.array(range(count), schema.field(0).type)
            writer.write_batch(pa.record_batch([at, pa.array([20.0] * count)], schema=schema))
    return sink.getvalue()


def chunked(*parts, whole=True):
    head = b"HTTP/1.1 200 OK\r\nTransfer-Encoding: chunked\r\n\r\n"
    body = b"".join(b"%x\r\n%s\r\n" % (len(part), part) for part in parts)
    return head + body + (b"0\r\n\r\n" if whole else b"")


SPAN = "2031-03-04T12:00:00Z/PT2M"


def test_an_answer_that_breaks_off_is_no_shorter_answer(tmp_path):
    """Cut just between two pieces, where what came looks whole."""
    content = arrow_stream(10, 10)
    cut = content[:-8]  # without the end mark
    for ask in (lambda lab: lab.readings("a/b", SPAN), lambda lab: lab.save_readings("a/b", SPAN, tmp_path / "in.arrow")):
        port = one_answer(chunked(cut, whole=False))
        with pytest.raises(LabAway, match="broke off"):
            ask(Lab(f"http://127.0.0.1:{port}", "person-abc", timeout_s=10))
    assert list(tmp_path.iterdir()) == []
    assert len(Lab(f"http://127.0.0.1:{one_answer(chunked(content))}", "person-abc").readings("a/b", SPAN)) == 20


def test_a_silent_server_is_given_up_after_the_set_patience():
    listener = socket.create_server(("127.0.0.1", 0))
    with listener, pytest.raises(LabAway, match="timeout_s"):
        Lab(f"http://127.0.0.1:{listener.getsockname()[1]}", "person-abc", timeout_s=0.05).stations()


def test_days_that_are_no_longer_kept_are_told():
    metadata = b'{"tap": "bench-a/in", "not_kept": [["2031-03-04T00:00:00Z", "2031-03-05T00:00:00Z"]]}'
    port = one_answer(chunked(arrow_stream(3, metadata=metadata)))
    with pytest.warns(NotKept, match="bench-a/in are no longer kept for 2031-03-04T00:00:00Z/2031-03-05T00:00:00Z"):
        frame = Lab(f"http://127.0.0.1:{port}", "person-abc").readings("bench-a/in", SPAN)
    assert len(frame) == 3 and frame.attrs["not_kept"]


@pytest.mark.django_db(transaction=True)
def test_it_reads_from_a_real_server():
    import numpy as np

    from labmon.people.keys import make_person_key
    from tests.factories import make_person, make_station, make_tap
    from tests.labmon.api.conftest import write

    tap = make_tap(make_station("bench-a"), "in")
    write(tap, port1=np.full(30_000, 1e-3), port2=np.full(30_000, 1e-5))
    key, port = make_person_key(make_person("researcher", username="r"), by=None)[1], free_port()
    with server(port, "labmon.asgi"):
        lab = Lab(f"http://127.0.0.1:{port}/", key)
        assert lab.stations().index.tolist() == ["bench-a"]
        parts = list(lab.readings_in_parts("bench-a/in", "2031-03-04T12:00:00Z/P1D"))
        assert sum(map(len, parts)) == 30_000 and max(map(len, parts)) < 30_000
        with pytest.raises(WrongQuestion, match="span"):
            lab.get("/taps/bench-a/in/readings", span="today")


