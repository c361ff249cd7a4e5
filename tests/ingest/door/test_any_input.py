"""Whatever comes in at the door: never a 5xx, never a stored NaN, and every reading is counted exactly once."""

import gzip
import json

import msgspec
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ingest.models import SetAside
from tests.ingest.conftest import ALL_KINDS

QUIET = settings(
    max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow]
)
TAPS = [tap.name for tap in ALL_KINDS]
COLUMNS = [
    "sequence",
    "at",
    "uptime_ms",
    "port1",
    "port2",
    "port1_min",
    "port2_sd",
    "monitor",
    "s0",
    "s1",
    "s2",
    "s3",
    "azimuth_deg",
    "ellipticity_deg",
    "dop",
    "power",
    "temperature_c",
    "humidity_pct",
    "pressure_hpa",
    "averaged",
    "clipped",
    "drive_ma",
    "odd",
]

any_json = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4),
    max_leaves=12,
)
stamps = st.datetimes().map(lambda at: at.isoformat() + "Z")
values = st.one_of(
    st.floats(),
    st.floats(0, 1e-3),
    st.integers(),
    st.integers(0, 100),
    st.none(),
    st.booleans(),
    st.text(max_size=5),
    stamps,
    st.integers(1_900_000_000_000_000, 1_960_000_000_000_000),
    any_json,
)


@st.composite
def parts(draw):
    """Columns of equal length, of any values."""
    names = draw(st.lists(st.sampled_from(COLUMNS), min_size=1, max_size=8, unique=True))
    names += draw(st.sampled_from([["port1", "port2"], ["s0", "s1", "s2", "s3"], ["temperature_c"], []]))
    count = draw(st.integers(0, 5))
    one = st.one_of(st.floats(0, 1e-3), st.integers(0, 50), values)
    return {name: draw(st.lists(one, min_size=count, max_size=count)) for name in dict.fromkeys(names)}


bodies = st.fixed_dictionaries(
    {"taps": st.dictionaries(st.sampled_from(TAPS), parts(), max_size=3)},
    optional={
        "boot": st.sampled_from(["a", "b"]) | st.none() | any_json,
        "firmware": st.text(max_size=5) | any_json,
        "odd": any_json,
        "now": st.fixed_dictionaries({}, optional={"at": values, "uptime_ms": st.integers(0, 2**33) | values}) | any_json,
    },
)


def checked(sender, response, found=None):
    """The one thing that must hold of every answer."""
    assert response.status_code in (200, 400, 413), (response.status_code, response.text)
    answer = response.json()
    if response.status_code != 200:
        assert response.headers["content-type"] == "application/problem+json" and answer["title"] and answer["detail"]
        return
    if found is not None:
        sent = sum(_length(part) for part in found["taps"].values())
        assert answer["stored"] + answer["known"] + len(answer["set_aside"]) == sent
    for name in TAPS:
        stored = sender.stored(name)
        assert not any(np.isinf(column).any() for column in stored.columns.values())
        needed = {"port1", "port2"} & set(stored.columns) if name != "dark" else {"port2"} & set(stored.columns)
        assert not any(np.isnan(stored.columns[column]).any() for column in needed)
        if len(stored):
            assert (~np.isnan(np.array(list(stored.columns.values())))).any(axis=0).all()


def _length(part):
    column = next(iter(part.values()))
    return len(column) // 8 if isinstance(column, bytes) else len(column)


@QUIET
@given(body=bodies)
def test_any_columns_of_the_right_form(sender, body):
    text = json.dumps(body)
    response = sender.post(text.encode(), headers={"Content-Type": "application/json"})
    checked(sender, response, None if "NaN" in text or "Infinity" in text else body)


@QUIET
@given(body=any_json)
def test_any_json(sender, body):
    checked(sender, sender.post(json.dumps(body).encode(), headers={"Content-Type": "application/json"}))


@QUIET
@given(
    body=st.fixed_dictionaries(
        {"taps": st.dictionaries(st.sampled_from(TAPS) | st.text(max_size=5), any_json | parts(), max_size=3)}
    )
)
def test_any_taps(sender, body):
    checked(sender, sender.post(json.dumps(body).encode(), headers={"Content-Type": "application/json"}))


@QUIET
@given(
    body=st.binary(max_size=200),
    kind=st.sampled_from(["application/json", "application/msgpack", "", "text/x"]),
    encoding=st.sampled_from(["", "gzip", "br"]),
    is_packed=st.booleans(),
)
def test_any_bytes(sender, body, kind, encoding, is_packed):
    checked(
        sender,
        sender.post(gzip.compress(body) if is_packed else body, headers={"Content-Type": kind, "Content-Encoding": encoding}),
    )


@st.composite
def binary_bodies(draw):
    """MessagePack with binary columns of any words, and lists between them."""
    count = draw(st.integers(0, 4))
    column = (
        st.binary(min_size=8 * count, max_size=8 * count)
        | st.lists(st.floats() | st.integers(-(2**63), 2**64 - 1), min_size=count, max_size=count)
        | st.lists(st.floats(0, 1), min_size=count, max_size=count).map(lambda found: np.array(found, "<f8").tobytes())
    )
    taps = {}
    for tap in draw(st.lists(st.sampled_from(TAPS), max_size=2, unique=True)):
        names = draw(st.lists(st.sampled_from(COLUMNS), max_size=5, unique=True)) + [
            "port1",
            "port2",
            "s0",
            "s1",
            "s2",
            "s3",
            "temperature_c",
        ]
        taps[tap] = {name: draw(column) for name in dict.fromkeys(names)}
    return {"boot": draw(st.sampled_from(["a", "b", None])), "now": {"uptime_ms": draw(st.integers(0, 2**34))}, "taps": taps}


@QUIET
@given(body=binary_bodies())
def test_any_words_in_binary_columns(sender, body):
    checked(sender, sender.post(msgspec.msgpack.encode(body), headers={"Content-Type": "application/msgpack"}), body)


@QUIET
@given(header=st.text(st.characters(codec="latin-1", exclude_categories=["Cc"]), max_size=30))
def test_any_authorization_header(sender, header):
    response = sender.post(b"{}", headers={"Authorization": header.encode("latin-1")})
    assert response.status_code == 401


@pytest.mark.parametrize("count", [1, 2, 1000])
def test_many_faulty_readings_are_each_listed(sender, count):
    body = {"boot": "a", "taps": {"eom-in": {"sequence": list(range(count)), "port1": [None] * count, "port2": [1] * count}}}
    answer = sender.send(body)
    assert len(answer["set_aside"]) == SetAside.objects.count() == count and answer["through"] == {"eom-in": count - 1}
