"""What each kind of tap may send, and what is stored of it: raw, as sent."""

import gzip
import math

import msgspec
import numpy as np
import pytest

from ingest.models import SetAside, StationBoot, Tap
from ingest.times import now_us
from tests.ingest.conftest import two_port

CONTRACT = {
    "boot": "7f3a9c21",
    "firmware": "bench-board 1.4",
    "taps": {
        "eom-in": {
            "sequence": [18200, 18201],
            "at": ["2031-03-04T02:11:05.120Z", "2031-03-04T02:11:06.120Z"],
            "uptime_ms": [7310070, 7311070],
            "port1": [0.000998, 0.000997],
            "port2": [0.0000011, 0.0000012],
            "port2_min": [0.0000010, 0.0000011],
            "port2_max": [0.0000012, 0.0000013],
            "temperature_c": [21.43, 21.43],
        }
    },
}
MSGPACK = {"Content-Type": "application/msgpack"}


def packed(body):
    return msgspec.msgpack.encode(body)


def floats(*values):
    return np.array(values, "<f8").tobytes()


def whole(*values):
    return np.array(values, "<i8").tobytes()


def test_the_contracts_example_is_stored_as_sent_and_answered(sender):
    answer = sender.send(CONTRACT)
    assert {name: answer[name] for name in ("stored", "known", "set_aside", "accepted", "through")} == {
        "stored": 2,
        "known": 0,
        "set_aside": [],
        "accepted": {"boot": "7f3a9c21", "ranges": {"eom-in": [[18200, 18201]]}},
        "through": {"eom-in": 18201},
    }
    assert answer["server_time"].endswith("Z") and len(answer) == 6
    stored = sender.stored()
    sent = CONTRACT["taps"]["eom-in"]
    assert stored.sequence.tolist() == sent["sequence"]
    assert {name: values.tolist() for name, values in stored.columns.items()} == {
        name: values for name, values in sent.items() if name not in ("sequence", "at")
    }
    assert StationBoot.objects.get().firmware == "bench-board 1.4"


def test_the_contracts_set_aside_example(sender):
    body = two_port(18200, 2)
    body["taps"]["eom-in"]["port2"][1] = None
    answer = sender.send(body)
    assert answer["stored"] == 1 and answer["accepted"]["ranges"] == {"eom-in": [[18200, 18201]]}
    assert answer["through"] == {"eom-in": 18201}
    assert answer["set_aside"] == [
        {
            "tap": "eom-in",
            "row": 1,
            "field": "port2",
            "why": "null is not a power",
            "do": "send the raw value or leave the reading out",
        }
    ]
    kept = SetAside.objects.get()
    assert (kept.station, kept.tap, kept.boot, kept.sequence) == (sender.station, sender.tap(), "7f3a", 18201)
    assert kept.reading["port2"] is None and kept.reading["port1"] == body["taps"]["eom-in"]["port1"][1]


@pytest.mark.parametrize(
    ("tap", "columns"),
    [
        (
            "eom-in",
            {"port1": [1e-3], "port2": [-1e-9], "port1_sd": [0.0], "port2_sd": [1e-9], "averaged": [16], "clipped": [True]},
        ),
        ("dark", {"port2": [0.1]}),
        ("dark", {"port2": [0.1], "monitor": [3.2], "drive_ma": [120.5]}),
        ("sop", {"s0": [1.0], "s1": [0.9], "s2": [0.3], "s3": [-0.2]}),
        ("sop", {"azimuth_deg": [-89.9], "ellipticity_deg": [45.0], "dop": [1.02], "power": [0.5]}),
        ("air", {"temperature_c": [21.4], "humidity_pct": [41.0], "pressure_hpa": [1013.2]}),
        ("air", {"temperature_c": [-40.0]}),
        ("adc", {"port1": [65535], "port2": [3]}),
        ("meter", {"port1": [-3.1], "port2": [-47.2]}),
    ],
)
def test_every_kind_of_tap_is_taken_raw(sender, tap, columns):
    assert sender.send({"boot": "a", "taps": {tap: {"sequence": [1], "at": [now_us()]} | columns}})["stored"] == 1
    assert {name: values.tolist() for name, values in sender.stored(tap).columns.items()} == {
        name: [float(value) for value in values] for name, values in columns.items()
    }


@pytest.mark.parametrize(
    ("tap", "columns", "field"),
    [
        ("eom-in", {"port1": [None], "port2": [1]}, "port1"),
        ("eom-in", {"port1": ["0.5"], "port2": [1]}, "port1"),
        ("eom-in", {"port1": [True], "port2": [1]}, "port1"),
        ("eom-in", {"port1": [[1]], "port2": [1]}, "port1"),
        ("eom-in", {"port1": [{}], "port2": [1]}, "port1"),
        ("eom-in", {"port1": [1e30], "port2": [1]}, "port1"),
        ("eom-in", {"port1": [10**400], "port2": [1]}, "port1"),
        ("eom-in", {"port1": [1], "port2": [1], "port2_sd": [-1]}, "port2_sd"),
        ("eom-in", {"port1": [1], "port2": [1], "temperature_c": ["warm"]}, "temperature_c"),
        ("eom-in", {"port1": [1], "port2": [1], "clipped": ["no"]}, "clipped"),
        ("eom-in", {"port1": [1], "port2": [1], "averaged": [-1]}, "averaged"),
        ("meter", {"port1": [2000.0], "port2": [1]}, "port1"),
        ("sop", {"azimuth_deg": [1], "ellipticity_deg": [46], "dop": [1]}, "ellipticity_deg"),
        ("sop", {"s0": [1], "s1": [None], "s2": [0], "s3": [0]}, "s1"),
        ("air", {"temperature_c": [-300]}, "temperature_c"),
        ("air", {"temperature_c": [None], "humidity_pct": [None]}, "temperature_c"),
        ("air", {"humidity_pct": [500]}, "humidity_pct"),
        ("eom-in", {"port1": [1], "port2": [1], "at": ["2031-03-04 02:11"]}, "at"),
        ("eom-in", {"port1": [1], "port2": [1], "at": ["2031-03-04T02:11:05"]}, "at"),
        ("eom-in", {"port1": [1], "port2": [1], "at": ["2031-02-30T02:11:05Z"]}, "at"),
        ("eom-in", {"port1": [1], "port2": [1], "at": [10**18]}, "at"),
        ("eom-in", {"port1": [1], "port2": [1], "at": [True]}, "at"),
        ("eom-in", {"port1": [1], "port2": [1], "sequence": [-1]}, "sequence"),
        ("eom-in", {"port1": [1], "port2": [1], "sequence": [1.5]}, "sequence"),
        ("eom-in", {"port1": [1], "port2": [1], "sequence": ["1"]}, "sequence"),
        ("eom-in", {"port1": [1], "port2": [1], "sequence": [2**63]}, "sequence"),
        ("eom-in", {"port1": [1], "port2": [1], "uptime_ms": [-5]}, "uptime_ms"),
        ("eom-in", {"port1": [1], "port2": [1], "uptime_ms": [1e300]}, "uptime_ms"),
    ],
)
def test_a_reading_that_cannot_be_used_is_set_aside_and_the_good_one_stored(sender, tap, columns, field):
    good = {
        "port1": 1e-3,
        "port2": 1e-6,
        "s0": 1,
        "s1": 1,
        "s2": 0,
        "s3": 0,
        "azimuth_deg": 1,
        "ellipticity_deg": 1,
        "dop": 1,
        "temperature_c": 20,
        "humidity_pct": 40,
        "averaged": 2,
        "clipped": False,
        "port2_sd": 0,
        "at": now_us(),
        "sequence": 7,
        "uptime_ms": 5,
    }
    stamps = {} if "at" in columns else {"at": [now_us() - 1, good["at"]]}
    both = {name: [*values, good[name]] for name, values in columns.items()} | stamps
    answer = sender.send({"boot": "a", "now": {"uptime_ms": 9}, "taps": {tap: both}})
    assert (answer["stored"], answer["known"]) == (1, 0)
    (aside,) = answer["set_aside"]
    assert (aside["tap"], aside["row"], aside["field"]) == (tap, 0, field) and aside["why"] and aside["do"]
    kept = SetAside.objects.get()
    assert kept.field == field and set(kept.reading) == set(both)
    assert all(np.isfinite(values).all() for values in sender.stored(tap).columns.values())


def test_null_in_a_column_that_may_be_absent_is_absent(sender):
    body = two_port(0, 2, temperature_c=[None, 21.0], port2_min=[None, 1e-7])
    assert sender.send(body)["stored"] == 2
    assert np.isnan(sender.stored().columns["temperature_c"][0]) and sender.stored().columns["port2_min"][1] == 1e-7


def test_unknown_columns_are_kept_with_the_reading_and_reported(sender):
    body = two_port(0, 2, gain=[3, None], note=["a\u0000b", {"x": [1]}], port3=[0.5, 0.6])
    assert sender.send(body)["stored"] == 2
    assert Tap.objects.get(name="eom-in").unknown_columns == ["gain", "note", "port3"]
    stored = sender.stored()
    assert "gain" not in stored.columns
    assert [msgspec.json.decode(text) for text in stored.unknown] == [
        {"gain": 3, "note": "a\ufffdb", "port3": 0.5},
        {"gain": None, "note": {"x": [1]}, "port3": 0.6},
    ]


def test_unknown_members_beside_taps_are_ignored(sender):
    sender.send(two_port() | {"channel_gains": [1, 2], "weather": "fine"})


def test_a_binary_body_gives_the_same_readings_as_json(sender):
    sender.send(two_port(0, 20))
    as_json = sender.stored()
    body = two_port(20, 20)["taps"]["eom-in"]
    columns = {name: (whole if name in ("sequence", "at") else floats)(*values) for name, values in body.items()}
    assert sender.send(packed({"boot": "7f3a", "taps": {"eom-in": columns}}), headers=MSGPACK)["stored"] == 20
    stored = sender.stored()
    assert stored.at_us.tolist() == [as_json.at_us[0] + 10**6 * number for number in range(40)]
    assert stored.column("port1").tolist() == [1e-3 + 1e-9 * number for number in range(40)]


def test_binary_min_and_max_and_lists_beside_them(sender):
    columns = {
        "sequence": [1, 2],
        "at": whole(now_us(), now_us() + 1),
        "port1": floats(1, 2),
        "port2": [0.1, 0.2],
        "port2_min": floats(0.05, 0.1),
        "port2_max": floats(0.2, 0.3),
        "averaged": whole(16, 16),
        "clipped": [False, True],
    }
    assert sender.send(packed({"boot": "a", "taps": {"eom-in": columns}}), headers=MSGPACK)["stored"] == 2
    stored = sender.stored().columns
    assert (
        stored["port2_max"].tolist() == [0.2, 0.3]
        and stored["averaged"].tolist() == [16, 16]
        and stored["clipped"].tolist() == [0, 1]
    )


@pytest.mark.parametrize("counts", [whole(65535, 0, 12), floats(65535, 0, 12)])
def test_binary_counts_may_be_int64_or_float64(sender, counts):
    columns = {"sequence": whole(1, 2, 3), "port1": counts, "port2": whole(1, 2, 3)}
    sender.send(packed({"boot": "a", "taps": {"adc": columns}}), headers=MSGPACK)
    assert sender.stored("adc").column("port1").tolist() == [65535, 0, 12]


@pytest.mark.parametrize("bad", [math.nan, math.inf, -math.inf])
def test_a_binary_number_that_is_not_finite_is_set_aside(sender, bad):
    columns = {"sequence": whole(1, 2), "port1": floats(bad, 1), "port2": floats(1, 1)}
    answer = sender.send(packed({"boot": "a", "taps": {"eom-in": columns}}), headers=MSGPACK)
    assert answer["stored"] == 1 and answer["set_aside"][0]["field"] == "port1"
    assert SetAside.objects.get().reading["port1"] in ("NaN", "Infinity", "-Infinity")


def test_subnormal_watts_stay_what_they_are(sender):
    columns = {"sequence": whole(1), "port1": floats(5e-324), "port2": floats(0)}
    sender.send(packed({"boot": "a", "taps": {"eom-in": columns}}), headers=MSGPACK)
    assert sender.stored().column("port1").tolist() == [5e-324]


@pytest.mark.parametrize("column", [b"", b"1234567", floats(1, 2)])
def test_a_binary_column_of_wrong_length_is_refused(sender, column):
    columns = {"sequence": [1], "port1": [1.0], "port2": column}
    response = sender.post(packed({"boot": "a", "taps": {"eom-in": columns}}), headers=MSGPACK)
    assert response.status_code == 400 and response.json()["field"] == "taps.eom-in.port2"


@pytest.mark.parametrize(
    "body",
    [
        b"",
        b"\xc1",
        b"\x80\x80",
        packed([1]),
        packed({1: 2}),
        b"\x91" * 5000,
        packed({"boot": b"x", "taps": {}}),
        packed({"taps": {"eom-in": {5: [1]}}}),
        packed({"taps": {b"eom-in": {}}}),
    ],
)
def test_what_is_no_msgpack_body_is_refused(sender, body):
    assert sender.post(body, headers=MSGPACK).status_code == 400


def test_msgpack_may_be_gzipped(sender):
    sender.send(gzip.compress(packed(two_port(0, 3))), headers=MSGPACK | {"Content-Encoding": "gzip"})


def test_the_plain_way_and_the_thorough_way_store_the_same(sender):
    """A column that needs a look (here: one null temperature) must not change what the others hold."""
    plain = two_port(0, 30, temperature_c=[20.0 + number for number in range(30)])
    odd = two_port(30, 30, temperature_c=[None] + [21.0 + number for number in range(29)])
    sender.send(plain)
    sender.send(odd)
    stored = sender.stored()
    assert stored.column("port2").tolist() == [1e-6 + 1e-12 * number for number in range(60)]
    assert np.isnan(stored.column("temperature_c")).sum() == 1
