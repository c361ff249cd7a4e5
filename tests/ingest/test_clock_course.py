"""Offset, skew and step of a clock through a network that delays by different times; the truth is known (invented)."""

import numpy as np
import pytest

from ingest.clock_course import clock_course

START_US = 1_930_356_665_000_000


def batches(offset_s=0.0, *, skew_ppm=0.0, step_s=0.0, count=600, seed=1, delay_s=0.02):
    """A batch a second; ways of 20 ms and an exponential tail; the clock is ``offset_s`` behind the server's at the end."""
    rng = np.random.default_rng(seed)
    sent_true_s = np.arange(count, dtype=float)
    arrival_s = sent_true_s + delay_s + rng.exponential(0.03, count)
    behind_s = offset_s + skew_ppm * 1e-6 * (sent_true_s - count) + np.where(sent_true_s < count / 2, 0.0, step_s) - step_s
    return (START_US + (arrival_s * 1e6).astype(np.int64), START_US + ((sent_true_s - behind_s) * 1e6).astype(np.int64))


@pytest.mark.parametrize("offset_s", [0.0, 7.5, -42.0])
def test_the_offset_is_found_within_the_shortest_way(offset_s):
    course = clock_course(*batches(offset_s))
    assert course.offset_s == pytest.approx(offset_s + 0.02, abs=0.01)
    assert course.error_s < 0.02
    assert (course.skew_ppm, course.step_s) == (None, None)


def test_a_skew_is_found_with_its_sign():
    course = clock_course(*batches(5.0, skew_ppm=200.0))
    assert course.skew_ppm == pytest.approx(200.0, rel=0.15)
    assert course.offset_s == pytest.approx(5.02, abs=0.03)
    assert course.step_s is None


@pytest.mark.parametrize("step_s", [3.0, -2.0])
def test_a_step_is_found_where_it_was(step_s):
    course = clock_course(*batches(10.0, step_s=step_s))
    assert course.step_s == pytest.approx(step_s, abs=0.05)
    assert (course.step_us - START_US) / 1e6 == pytest.approx(300, abs=60)
    assert course.offset_s == pytest.approx(10.02, abs=0.02)


def test_a_good_clock_is_seldom_called_skewed_or_stepped():
    courses = [clock_course(*batches(seed=seed)) for seed in range(200)]
    assert sum(course.step_s is not None for course in courses) == 0
    assert sum(course.skew_ppm is not None for course in courses) <= 4


def test_few_batches_say_nothing_and_repeats_are_one():
    arrival_us, sent_us = batches(count=9)
    assert clock_course(np.repeat(arrival_us, 50), np.repeat(sent_us, 50)) is None
