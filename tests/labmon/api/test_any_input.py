"""Whatever a caller sends: an answer of the document, never a 5xx."""

import json
import string

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from labmon.api.openapi import document
from labmon.api.schemas import ALARM_STATES, MEASURED

anything = settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=60, deadline=None)
READS = sorted(path for path, calls in document()["paths"].items() if "get" in calls and path.startswith("/api/"))
words = st.sampled_from([*MEASURED, *ALARM_STATES, "csv", "json", "arrow", "parquet", "1", "0", "-1", "2147483648",
                         str(2**63 - 1), "2031-03-04T12:00:00Z/PT2M", "2031-03-04T12:00:00Z/P9000Y",
                         "0001-01-01T00:00:00Z/9999-12-31T00:00:00Z",
                         "0001-01-01T00:00:00Z", "9999-12-31T23:59:59.999999Z"])
parameters = st.sampled_from(["span", "points", "quantity", "format", "as_of", "state", "experiment", "before", "count", "x"])
queries = st.dictionaries(parameters, words | st.text(max_size=20) | st.lists(words, max_size=2), max_size=4)
spans = st.sampled_from(["2031-03-04T12:00:00Z/PT2M", "2031-03-04T12:00:00Z/P100Y", "1900-01-01T00:00:00Z/2200-01-01T00:00:00Z",
                         "2031-03-04T12:00:00Z/PT0.000001S", "0001-01-01T00:00:00Z/9999-12-31T00:00:00Z"])
letters = string.ascii_letters + string.digits + "-%/\x00é."
parts = st.text(letters, min_size=1, max_size=12) | st.sampled_from(["bench-a", "in", "1"])
short_text = st.text(max_size=8)
jsons = st.recursive(st.none() | st.booleans() | st.floats() | st.integers() | short_text,
                     lambda inner: st.lists(inner, max_size=3) | st.dictionaries(short_text, inner, max_size=3), max_leaves=8)


def filled(path, one="bench-a", two="in", number="1"):
    return path.replace("{station}", one).replace("{tap}", two).replace("{id}", number)


@anything
@given(st.sampled_from(READS), queries)
def test_any_query(read_lab, path, query):
    answer = read_lab.manager.get(filled(path, number=str(read_lab.experiment.pk)), **query)
    assert answer.status_code in {200, 400} or ("/runs/" in path and answer.status_code == 404)     # the lab has no run
    if answer.streaming:
        b"".join(answer.streaming_content)


@anything
@given(st.sampled_from(["history", "readings"]), spans, queries)
def test_any_query_beside_a_span(read_lab, call, span, query):
    answer = read_lab.manager.get(f"/api/v1/taps/bench-a/in/{call}", **query | {"span": span})
    assert answer.status_code in {200, 400}
    if answer.streaming:
        b"".join(answer.streaming_content)


@anything
@given(st.sampled_from(READS), parts, parts, parts)
def test_any_address(read_lab, path, one, two, number):
    assert read_lab.manager.get(filled(path, one, two, number)).status_code in {200, 400, 404}


def written(lab, path, body):
    call = lab.manager.patch if path.endswith("calibration") else lab.manager.post
    return call(path, body)


WRITES = ["/api/v1/experiments", "/api/v1/experiments/{id}/limits", "/api/v1/taps/bench-a/in/calibration",
          "/api/v1/alarms/{id}/acknowledge"]
FIELDS = ["name", "taps", "tap", "quantity", "alarm", "warning", "on_delay_s", "off_delay_s", "deadband", "reason",
          "valid_from", "zero1", "gain_ratio", "leakage", "wanted_state", "saturation1", "note"]
values = jsons | words | st.sampled_from(["bench-a/in", ["bench-a/in"], ["bench-a/in", "bench-a/in"], "er_db", "a\x00",
                                          "\ud800", 1e300, 10**400, [[1, 0], [0, 1]], [0, 0, 1]])


@anything
@given(st.sampled_from(WRITES), st.dictionaries(st.sampled_from(FIELDS), values, max_size=6) | jsons)
def test_any_json_body(lab, path, body):
    answer = written(lab, filled(path, number=str(lab.experiment.pk)), json.dumps(body))
    assert answer.status_code in {200, 201, 400, 404}


@anything
@given(st.sampled_from(WRITES), st.binary(min_size=1, max_size=60))
def test_any_bytes(lab, path, body):
    answer = written(lab, filled(path, number=str(lab.experiment.pk)), body)
    assert answer.status_code in {200, 201, 400, 404}
