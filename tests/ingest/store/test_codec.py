"""What is packed comes back to the last bit, and damage is seen."""

import zlib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from ingest.store.arrays import DamagedBody, pack_integers, pack_numbers, pack_runs, unpack_integers, unpack_numbers, unpack_runs
from ingest.store.codec import Batch, pack_batch, pack_block, pack_even_batch, unpack_batch, unpack_block
from ingest.store.columns import NO_SEQUENCE, NO_TIME, Readings

int64s = hnp.arrays(
    np.int64,
    st.integers(1, 200),
    elements=st.one_of(
        st.integers(-(2**63), 2**63 - 1), st.integers(-5, 5), st.integers(1_930_000_000_000_000, 1_930_000_000_100_000)
    ),
)
floats = st.one_of(st.floats(), st.floats(1e-9, 1e-3), st.sampled_from([0.0, -0.0, np.nan, np.inf]))
numbers = hnp.arrays(np.float64, st.integers(1, 200), elements=floats) | hnp.arrays(
    np.float32, st.integers(1, 200), elements=st.floats(width=32)
)


@given(int64s)
def test_integers_come_back(values):
    for pack, unpack in ((pack_integers, unpack_integers), (pack_runs, unpack_runs)):
        how, frame = pack(values)
        np.testing.assert_array_equal(unpack(how, memoryview(frame), len(values)), values)


@given(numbers)
def test_numbers_come_back_to_the_last_bit(values):
    how, frame = pack_numbers(values)
    back = unpack_numbers(how, memoryview(frame), len(values), values.dtype.str[1:])
    assert back.dtype == values.dtype and back.tobytes() == values.tobytes()


def some_readings(count=500, columns=("port1", "port2"), seed=3):
    random = np.random.default_rng(seed)
    at_us = 1_930_000_000_000_000 + np.cumsum(random.integers(99_000, 101_000, count))
    arrival_us = np.repeat(at_us[::10] + 10**6, 10)[:count]
    return Readings(
        at_us,
        {name: random.normal(1e-3, 1e-6, count) for name in columns},
        np.repeat([4, 9], count)[::2].copy(),
        np.arange(count),
        np.where(np.arange(count) % 7 == 0, NO_TIME, at_us - 5),
        arrival_us,
        arrival_us - 3,
        np.arange(count) % 7 == 0,
        None,
    )


def assert_same(one, other):
    for name in ("at_us", "boot_id", "sequence", "own_at_us", "arrival_us", "sent_us", "is_server_timed"):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name), err_msg=name)
    assert list(one.columns) == list(other.columns)
    for name, values in one.columns.items():
        assert values.tobytes() == other.columns[name].tobytes(), name
    assert (one.unknown is None) == (other.unknown is None)
    if one.unknown is not None:
        assert one.unknown.tolist() == other.unknown.tolist()


def test_a_block_comes_back():
    assert_same(some_readings(), unpack_block(pack_block(some_readings())))


def test_a_block_of_one_reading_with_nothing_known_comes_back():
    one = Readings(
        *(np.array([5]) if name != "columns" else {} for name in ("at", "columns", "boot", "sequence", "own", "arrival", "sent")),
        np.array([True]),
        np.array(['{"x":1}'], object),
    )
    assert_same(one, unpack_block(pack_block(one)))


def test_float32_is_kept_as_float32_and_read_as_float64():
    readings = some_readings(columns=())
    sent = np.random.default_rng(1).random(500, np.float32)
    body = pack_block(
        Readings(
            **(
                {
                    name: getattr(readings, name)
                    for name in ("at_us", "boot_id", "sequence", "own_at_us", "arrival_us", "sent_us", "is_server_timed")
                }
                | {"columns": {"s0": sent}}
            )
        )
    )
    assert unpack_block(body, as_sent=True).columns["s0"].dtype == np.float32
    np.testing.assert_array_equal(unpack_block(body).columns["s0"], sent.astype(np.float64))


def test_a_block_is_small():
    """Full mantissa noise cannot be packed; times, numbers and arrivals nearly vanish: below 9 bytes a value."""
    assert len(pack_block(some_readings(6000, columns=("port1", "port2", "temperature_c")))) < 6000 * (3 * 6.2 + 5)


def test_only_wanted_columns_are_opened():
    assert list(unpack_block(pack_block(some_readings()), frozenset({"port2"})).columns) == ["port2"]


def test_every_flipped_byte_of_a_block_is_seen():
    readings = some_readings(40)
    body = pack_block(readings)
    for place in range(len(body)):
        damaged = bytearray(body)
        damaged[place] ^= 0x55
        try:
            found = unpack_block(bytes(damaged))
        except DamagedBody:
            continue
        assert_same(found, readings)  # a bit that means nothing may flip; the content may not


def test_a_cut_block_is_seen():
    body = pack_block(some_readings(40))
    for length in (0, 5, 20, len(body) - 1):
        with pytest.raises(DamagedBody):
            unpack_block(body[:length])
    with pytest.raises(DamagedBody):
        unpack_block(body + b"x")


@given(st.data())
@settings(max_examples=60)
def test_a_batch_comes_back(data):
    count = data.draw(st.integers(1, 30))
    at_us = data.draw(hnp.arrays(np.int64, count, elements=st.integers(0, 2**51)))
    sequence = data.draw(
        st.one_of(
            st.just(np.full(count, NO_SEQUENCE)),
            st.just(np.arange(7, 7 + count)),
            hnp.arrays(np.int64, count, elements=st.integers(-1, 9)),
        )
    )
    own = data.draw(st.sampled_from([at_us, np.full(count, NO_TIME), at_us + 1]))
    names = tuple(data.draw(st.lists(st.sampled_from(["port1", "port2", "x"]), max_size=3, unique=True)))
    values = data.draw(hnp.arrays(np.float64, (len(names), count), elements=floats))
    unknown = data.draw(
        st.none() | st.lists(st.text(), min_size=count, max_size=count).map(lambda texts: np.array([*texts, None], object)[:-1])
    )
    batch = Batch(at_us, names, values, sequence, own, 99, data.draw(st.booleans()), unknown)
    body = pack_batch(batch)
    back = unpack_batch(body, zlib.crc32(body))
    assert (back.names, back.sent_us, back.is_server_timed) == (names, 99, batch.is_server_timed)
    for name in ("at_us", "sequence", "own_at_us"):
        np.testing.assert_array_equal(getattr(back, name), getattr(batch, name))
    assert back.values.tobytes() == values.tobytes()
    assert (back.unknown is None and unknown is None) or back.unknown.tolist() == unknown.tolist()


def test_the_usual_batch_is_packed_alike_in_few_steps():
    at_us, values = np.arange(5) + 10**15, np.random.default_rng(1).random((2, 5))
    batch = Batch(at_us, ("port1", "port2"), values, np.arange(3, 8), at_us, 77, is_server_timed=False)
    assert pack_even_batch(at_us, ("port1", "port2"), values, 3, 77) == pack_batch(batch)


def test_a_damaged_batch_is_seen():
    at_us = np.arange(5) + 10**15
    body = pack_batch(Batch(at_us, ("port1",), np.ones((1, 5)), np.arange(5), at_us, 7, is_server_timed=False))
    for place in range(len(body)):
        damaged = bytearray(body)
        damaged[place] ^= 1
        with pytest.raises(DamagedBody):
            unpack_batch(bytes(damaged), zlib.crc32(body))
