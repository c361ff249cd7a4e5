"""Frozen channels."""

import json

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.flat import flat_from_json, mark_flat, start_flat
from analysis.reduce.tap import flat_channels
from tests.strategies import cuts

FIRST = np.array([0])


def marks(*channels):
    values = np.stack(channels, axis=-1).astype(float)
    return mark_flat(values, FIRST, start_flat(1, values.shape[1]))[0]


def plainly(values):
    """The rule of docs/formulas.md (F-14) one reading after the other, for one channel."""
    flat, last, run, step, pairs, moves, large = [], None, 0, np.inf, 0, 0, 0
    for value in values:
        if last is None or value == last:
            run += 1
        else:
            step = min(step, abs(value - last))
            pairs, moves, large, run = pairs + min(run, 30), moves + 1, large + (abs(value - last) > 1.5 * step), 1
        last = value
        flat.append(run >= 30 and moves >= 10 and 2 * large > pairs)
    return np.array(flat)


def test_job_example_of_a_frozen_dark_port():
    """Job paper: 600 equal port 2 values while port 1 moves -> flat, even on a tap never seen to move before."""
    port1 = np.random.default_rng(1).normal(1e-3, 1e-6, 600)
    found = marks(port1, np.full(600, 1.1e-6))
    assert found[-1].tolist() == [False, True]
    assert not found[:298, 1].any()


def test_steady_bright_port_is_no_frozen_port():
    """Steady light on a coarse converter repeats for hours while the dark port moves."""
    port2 = np.random.default_rng(1).normal(1e-6, 1e-8, 5000)
    assert not marks(np.full(5000, 1e-3), port2).any()


def test_job_example_of_delays_is_not_a_frozen_value():
    """Job paper, delays: long stretches of one or two values are a test bench's light, and must stay judged."""
    er_db = np.concatenate([np.full(100, 25.0), np.full(61, 19.5), np.tile([19.9, 20.1], 1800), np.full(120, 21.1)])
    port1 = np.full(len(er_db), 1e-3)
    assert not marks(port1, port1 * 10 ** (-er_db / 10)).any()


def test_flat_from_the_30th_equal_reading_on():
    rng = np.random.default_rng(2)
    values = np.concatenate([rng.normal(size=100), np.full(40, 0.5), rng.normal(size=20)])
    found = marks(values)[:, 0]
    assert np.flatnonzero(found).tolist() == list(range(129, 140))


def test_a_calm_quantised_port_is_not_flat():
    """A port that toggles by one step of its converter may well repeat 30 times."""
    rng = np.random.default_rng(3)
    values = np.where(rng.random(5000) < 0.02, 1.0, 0.0)
    assert np.max(np.diff(np.flatnonzero(np.diff(values)))) > 30
    assert not marks(values, rng.normal(size=5000))[:, 0].any()


def test_one_touch_of_a_calm_port_does_not_make_its_calm_suspicious():
    values = np.concatenate([np.arange(200) // 20 % 2, [500.0, 480.0], np.full(100, 490.0)])
    assert not marks(values)[:, 0].any()


def test_both_channels_frozen_from_the_start_is_silence_of_both_not_flat():
    """Nothing moves, so nothing says that the reading should: calm is not proven wrong."""
    assert not marks(np.full(900, 1.0), np.full(900, 2.0)).any()


def test_stokes_channel_changes_with_any_component():
    base = {name: np.zeros(4) for name in ("s0", "s1", "s2", "s3")}
    base["s1"][1], base["s2"][2], base["s3"][3] = 1.0, 1.0, 1.0
    channel = flat_channels("stokes", base)[:, 0]
    assert len(set(channel.tolist())) == 4
    assert flat_channels("climate", {"temperature_c": np.zeros(2)}).shape == (2, 0)


steps = st.lists(st.one_of(st.integers(-3, 3), st.just(0), st.integers(-1, 1)), min_size=1, max_size=60)


@st.composite
def channels(draw):
    """A channel with runs: values repeated 1 to 45 times, steps of a few units."""
    values = np.cumsum(draw(steps)).astype(float)
    return np.repeat(
        values, draw(st.lists(st.sampled_from([1, 1, 1, 2, 29, 30, 45]), min_size=len(values), max_size=len(values)))
    )


@given(channels())
def test_vector_form_equals_the_rule_step_by_step(values):
    np.testing.assert_array_equal(marks(values)[:, 0], plainly(values))


@given(st.data())
def test_cutting_the_readings_changes_nothing(data):
    """Live is replay: state through JSON at every cut, several taps in one call or one at a time."""
    taps = data.draw(st.lists(channels(), min_size=1, max_size=3))
    first = np.cumsum([0, *(len(tap) for tap in taps)])[:-1]
    together, state = mark_flat(np.concatenate(taps)[:, None], first, start_flat(len(taps), 1))
    for k, values in enumerate(taps):
        saved, found = None, []
        for part in data.draw(cuts(len(values))):
            if len(values[part]):
                flat, after = mark_flat(values[part][:, None], FIRST, flat_from_json([saved], 1))
                saved = json.loads(json.dumps(after.as_json()))[0]
                found.append(flat[:, 0])
        np.testing.assert_array_equal(np.concatenate(found), together[first[k] : first[k] + len(values), 0])
        assert saved == json.loads(json.dumps(state.as_json()))[k]


def test_state_of_another_number_of_channels_starts_anew():
    saved = mark_flat(np.ones((5, 2)), FIRST, start_flat(1, 2))[1].as_json()[0]
    assert flat_from_json([saved], 1).run.tolist() == [[0]]
    assert flat_from_json([saved, None], 2).run.tolist() == [[5, 5], [0, 0]]
