"""Bytes to a map: a name given twice is seen, whatever the texts between hold."""

import gzip
import json

import msgspec
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.door.decode import Form, decode, form_of
from ingest.door.refusal import Refusal

columns = st.dictionaries(
    st.text(max_size=5), st.lists(st.text(max_size=5) | st.floats(allow_nan=False, allow_infinity=False), max_size=4), max_size=3
)
bodies = st.fixed_dictionaries(
    {"taps": st.dictionaries(st.text(max_size=5), columns, max_size=3)},
    optional={
        "boot": st.text(max_size=5),
        "now": st.dictionaries(st.text(max_size=3), st.text(max_size=3) | st.integers(-(2**63), 2**63), max_size=2),
    },
)


@given(bodies)
def test_a_body_comes_through_as_it_is(body):
    assert decode(json.dumps(body).encode(), Form()) == body
    assert decode(msgspec.msgpack.encode(body), Form(is_msgpack=True)) == body


@given(bodies, st.sampled_from(["top", "now", "taps", "part"]))
def test_a_name_twice_is_refused_wherever_it_stands(body, where):
    body = {"now": {"at": "a"}, "taps": {"tap": {"port1": [1]}}} | body
    twin = {
        "top": '"boot": "x", "boot": "y"',
        "now": '"now": {"at": 1, "at": 2}',
        "taps": '"taps": {"t": {}, "t": {}}',
        "part": '"taps": {"t": {"p": ["a"], "p": ["b"]}}',
    }[where]
    name = {"top": "boot", "now": "now"}.get(where, "taps")
    rest = json.dumps({key: value for key, value in body.items() if key != name})[1:-1]
    with pytest.raises(Refusal) as refused:
        decode(f"{{{rest}{', ' if rest else ''}{twin}}}".encode(), Form())
    assert "given twice" in refused.value.title


@pytest.mark.parametrize("body", [b'{"boot": "a\\"b", "taps": {}}', b'{"taps": {"t": {"odd": [{"x": {"y": "z"}}, "\\u0022"]}}}'])
def test_quotation_marks_in_texts_are_no_names(body):
    assert decode(body, Form()) == json.loads(body)


@pytest.mark.parametrize(
    ("kind", "encoding", "form"),
    [
        ("", "", Form()),
        ("application/json", "identity", Form()),
        ("APPLICATION/MSGPACK", "GZIP", Form(is_msgpack=True, is_gzip=True)),
        ("application/x-msgpack", "x-gzip", Form(is_msgpack=True, is_gzip=True)),
    ],
)
def test_forms_by_header(kind, encoding, form):
    assert form_of(kind, encoding) == form


@given(bodies)
def test_without_headers_the_first_bytes_tell_the_form(body):
    for written in (json.dumps(body).encode(), b" \n" + json.dumps(body).encode(), msgspec.msgpack.encode(body)):
        assert decode(written, None) == decode(gzip.compress(written), None) == body


@pytest.mark.parametrize(("body", "says"), [(b"", "not JSON"), (b"\x93\x01", "not UTF-8"), (b"\x80\x80", "not MessagePack"),
                                            (b"\x1f\x8bno", "not gzip"), (b"\xdf", "not MessagePack"), (b"[1]", "a list")])
def test_without_headers_anything_else_is_refused(body, says):
    with pytest.raises(Refusal) as refused:
        decode(body, None)
    assert refused.value.status == 400 and (says in refused.value.title or says == "not UTF-8")
