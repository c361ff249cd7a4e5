"""Every decoder under much more of anything than the daily tests give it; what breaks one is kept beside that decoder as a test.

Bodies are sound ones that were damaged (bytes changed, cut, doubled) as well as anything at all; LABMON_TEST_EXAMPLES says how
many examples each gets (1,000 unless told). `tests/ingest/door/test_any_input.py` and its like stand for what is daily.
"""

import asyncio
import contextlib
import gzip
import json
import os

import msgspec
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ingest.door.asgi import Door
from ingest.door.body import Body, KnownStation, KnownTap
from ingest.door.decode import Form, decode
from ingest.door.keys import NameRing
from ingest.door.payload import check_body
from ingest.door.refusal import Refusal
from ingest.files.faults import FileFault
from ingest.mqtt.address import BrokerAddress
from ingest.mqtt.subscriber import Subscriber
from tests.ingest.conftest import ALL_KINDS
from tests.ingest.door.test_any_input import any_json, binary_bodies, bodies
from tests.ingest.files.test_guess import proposed
from tests.ingest.files.test_parse import PLAIN, reader, rows_of_cells

pytestmark = pytest.mark.slow

MANY = int(os.environ.get("LABMON_TEST_EXAMPLES", "1000"))
DEEP = settings(max_examples=MANY, deadline=None,
                suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow, HealthCheck.data_too_large])
STATION = KnownStation(1, "s", {tap.name: KnownTap(number, tap.name, tap.kind, tap.unit) for number, tap in enumerate(ALL_KINDS)})
SOUND = st.one_of(bodies.map(lambda body: json.dumps(body).encode()), binary_bodies().map(msgspec.msgpack.encode),
                  any_json.map(lambda body: json.dumps(body).encode()),
                  (bodies | any_json).map(lambda body: json.dumps(body, ensure_ascii=False).encode("utf-8", "surrogatepass")))

ODDITIES = [b"NaN", b"-Infinity", b"1e999", b"\\ud800", b"[[[[", b"\xc1", b"\xdf\xff\xff\xff\xff", b"\x00", b"\xff\xfe"]


@st.composite
def damaged(draw, sound=SOUND):
    """Bytes of a sound body with a few faults of transport or of a writer."""
    body = bytearray(draw(sound))
    for _ in range(draw(st.integers(0, 3))):
        place = draw(st.integers(0, len(body)))
        match draw(st.sampled_from(["change", "cut", "insert", "repeat"])):
            case "change" if place < len(body):
                body[place] = draw(st.integers(0, 255))
            case "cut":
                del body[place:place + draw(st.integers(1, 20))]
            case "insert":
                body[place:place] = draw(st.binary(max_size=6) | st.sampled_from(ODDITIES))
            case _:
                body[place:place] = body[place:place + 30]
    whole = bytes(body)
    return gzip.compress(whole) if draw(st.booleans()) else whole


ANYTHING = damaged() | st.binary(max_size=300)


@DEEP
@given(body=ANYTHING, form=st.sampled_from([None, *(Form(one, other) for one in (False, True) for other in (False, True))]))
def test_any_bytes_become_checked_columns_or_a_refusal(body, form):
    """JSON, MessagePack and gzip, told by headers (HTTP) or by the first bytes (WebSocket, MQTT)."""
    try:
        checked = check_body(decode(body, form), STATION, 1_930_000_000_000_000)
    except Refusal as refusal:
        told = refusal.as_json()
    else:
        told = _checked(checked)
    assert told["status"] in (200, 400, 413) and json.dumps(told, allow_nan=False)


def _checked(checked):
    """What must hold of a body that is taken."""
    assert isinstance(checked, Body)
    for part in checked.parts:
        assert not np.isinf(part.values).any()
        assert len(part) + len(part.aside) == part.count and len(part.own_at_us) == len(part) == part.values.shape[1]
    return {"status": 200}


@DEEP
@given(content=st.one_of(damaged(rows_of_cells.map(lambda text: text.encode("utf-8", "surrogatepass"))), st.binary(max_size=400)),
       mapping=st.sampled_from([PLAIN, PLAIN.replace("[file]", '[file]\ndelimiter = "blanks"'),
                                PLAIN.replace("[file]", '[file]\nencoding = "utf-16"\nskip_lines = 1')]),
       at_once=st.integers(1, 5))
def test_any_file_is_readings_or_refused_lines(content, mapping, at_once):
    try:
        file = reader(content, mapping)
        parts = list(file.parts(at_once))
    except FileFault:
        return
    assert sum(len(part) + len(part.refused) for part in parts) + file.lines_left_out == file.lines_read
    for part in parts:
        assert all(np.isfinite(part.columns[name]).all() for name in ("port1", "port2"))


@DEEP
@given(content=st.one_of(damaged(rows_of_cells.map(lambda text: text.encode("utf-8", "surrogatepass"))), st.binary(max_size=400)))
def test_any_file_is_guessed_at_without_a_fault(content):
    with contextlib.suppress(FileFault):
        assert len(proposed(content).first_lines) <= 20


@pytest.fixture
def subscriber(sender):
    """A subscriber without a broker, in front of a real store."""
    made = Subscriber(BrokerAddress("127.0.0.1", 1, "u", "p", False), "fuzz")
    made.door = Door(NameRing(), has_presence=False)
    loop = asyncio.new_event_loop()
    yield lambda body: loop.run_until_complete(made._through_door(body, sender.station.name))
    loop.run_until_complete(made.door.close())
    loop.run_until_complete(loop.shutdown_default_executor())
    loop.close()


@settings(DEEP, max_examples=max(MANY // 4, 1))
@given(body=ANYTHING)
def test_any_mqtt_message_is_answered(subscriber, body):
    """Taken, or refused and kept aside: never without an answer, which would hold up the broker for good."""
    answer = subscriber(body)
    assert answer is not None and ("accepted" in answer or answer["status"] in (400, 413)), answer
    assert json.dumps(answer, allow_nan=False)
