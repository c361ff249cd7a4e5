"""Columns of each tap kind."""

import pytest

from ingest.door.columns import words_of
from ingest.door.vocabulary import plan_for
from tests.ingest.door.test_parts import floats, whole


@pytest.mark.parametrize(
    ("kind", "names", "known"),
    [
        ("two-port", ("port1", "port2", "port1_min", "port2_sd", "clipped"), True),
        ("dark-port", ("port2", "monitor", "monitor_max", "averaged"), True),
        ("stokes", ("s0", "s1", "s2", "s3", "s0_sd"), True),
        ("stokes", ("azimuth_deg", "ellipticity_deg", "dop", "power"), True),
        ("climate", ("temperature_c", "humidity_pct", "pressure_hpa"), True),
        ("two-port", ("port1", "port2", "s0"), False),
        ("climate", ("temperature_c", "port1"), False),
        ("dark-port", ("port2", "port1"), False),
    ],
)
def test_what_a_kind_knows(kind, names, known):
    plan = plan_for(kind, "W" if kind != "climate" else "", (*names, "at", "sequence", "uptime_ms"))
    assert not plan.missing and (plan.unknown == ()) == known


@pytest.mark.parametrize(
    ("kind", "names"),
    [
        ("two-port", ("port2",)),
        ("dark-port", ("monitor",)),
        ("stokes", ("s0", "s1", "s2")),
        ("stokes", ("azimuth_deg", "dop")),
        ("climate", ("at",)),
    ],
)
def test_what_a_kind_needs(kind, names):
    assert plan_for(kind, "W", names).missing


@pytest.mark.parametrize(
    ("column", "name", "unit", "expected"),
    [
        (whole(1, 2), "sequence", "W", [1, 2]),
        (floats(1, 2), "sequence", "W", [1, 2]),
        (floats(0.5), "port1", "W", [0.5]),
        (whole(7), "port1", "count", [7]),
        (floats(7), "port1", "count", [7]),
        (floats(0, 0), "port1", "count", [0, 0]),
        (whole(16), "averaged", "W", [16]),
        (floats(5e-324), "port1", "W", [5e-324]),
    ],
)
def test_binary_words_are_read_as_what_they_are(column, name, unit, expected):
    assert words_of(column, name, unit).tolist() == expected
