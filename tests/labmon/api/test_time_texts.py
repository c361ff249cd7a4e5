"""Times in one go are those that Arrow's own formatter and Python's write one by one."""

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from hypothesis import given
from hypothesis import strategies as st

from ingest.times import YEAR_1_US, YEAR_10000_US, rfc3339_of
from labmon.api.time_texts import time_texts

KIND = pa.timestamp("us", tz="UTC")


@given(st.lists(st.one_of(st.none(), st.integers(YEAR_1_US, YEAR_10000_US - 1)), max_size=30))
def test_it_writes_what_python_writes(times):
    texts = time_texts(pa.chunked_array([pa.array(times, KIND)]))
    texts.validate(full=True)
    assert texts.to_pylist() == [None if at_us is None else rfc3339_of(at_us) for at_us in times]


def test_it_writes_what_arrow_writes():
    at_us = np.random.default_rng(1).integers(0, 4_000_000_000_000_000, 2000)
    times = pa.chunked_array([pa.array(at_us[:700], KIND), pa.array(at_us[700:], KIND)])
    assert time_texts(times).equals(pc.strftime(times, format="%Y-%m-%dT%H:%M:%SZ").combine_chunks())
