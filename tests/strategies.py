"""Hypothesis strategies: powers, states of polarization, time stamps with gaps, reduced samples."""

from typing import Any

import numpy as np
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from analysis.reduce.calibration import TapCalibration
from analysis.reduce.sample import Reduced
from analysis.reduce.tap import TrustContext, reduce_tap
from analysis.reduce.trust import Reason

powers_w = st.floats(1e-9, 1e-1)
er_values_db = st.floats(-40.0, 60.0)
angles_rad = st.floats(-np.pi / 2, np.pi / 2)


@st.composite
def unit_sops(draw: st.DrawFn) -> np.ndarray:
    """A unit Stokes vector, shape (3,)."""
    azimuth, height = draw(st.floats(-np.pi, np.pi)), draw(st.floats(-1.0, 1.0))
    radius = np.sqrt(1.0 - height**2)
    return np.array([radius * np.cos(azimuth), radius * np.sin(azimuth), height])


@st.composite
def times_us(draw: st.DrawFn, count: int, interval_us: int = 1_000_000) -> np.ndarray:
    """Rising time stamps, shape (count,): jitter, and some gaps of many intervals."""
    start_us = draw(st.integers(0, 2_000_000_000)) * 1_000_000
    steps = hnp.arrays(
        np.int64,
        count,
        elements=st.one_of(
            st.integers(interval_us - interval_us // 5, interval_us + interval_us // 5),
            st.integers(interval_us, 20 * interval_us),
        ),
    )
    return start_us + np.cumsum(draw(steps))


@st.composite
def two_port_samples(draw: st.DrawFn, max_size: int = 60, interval_us: int = 1_000_000) -> Reduced:
    """Reduced two-port samples of all kinds: good, below, at floor, dark, saturated, negative, doubtful."""
    count = draw(st.integers(1, max_size))
    marks = draw(hnp.arrays(np.uint32, count, elements=st.sampled_from([0, 0, 0, int(Reason.OLD_ZERO), int(Reason.TWO_DEVICES)])))
    columns: dict[str, Any] = {
        "port1": draw(hnp.arrays(np.float64, count, elements=st.sampled_from([1e-3, 1e-3, 2e-3, 5e-9, 2e-2]))),
        "port2": draw(hnp.arrays(np.float64, count, elements=st.sampled_from([1e-6, 8e-6, 1.2e-5, 2e-5, 5e-10, -5e-10, -1e-6]))),
        "temperature_c": draw(hnp.arrays(np.float64, count, elements=st.floats(15.0, 30.0))),
    }
    cal = TapCalibration(floor1=1e-8, floor2=1e-9, saturation1=1e-2)
    at_us = draw(times_us(count, interval_us))
    return reduce_tap("two-port", "W", at_us, columns, cal, trust_context=TrustContext(marks=marks))


@st.composite
def cuts(draw: st.DrawFn, count: int) -> list[slice]:
    """A division of range(count) into slices, some of them empty."""
    edges = sorted(draw(st.lists(st.integers(0, count), max_size=6)))
    return [slice(a, b) for a, b in zip([0, *edges], [*edges, count], strict=True)]
