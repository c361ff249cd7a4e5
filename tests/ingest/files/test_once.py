"""Importing is a union by the larger count: any order, any number of times, any cut gives the same readings."""

from collections import Counter

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.files.once import FileSoFar, Keys, judge_part, keys_of

row = st.tuples(st.integers(0, 4), st.integers(0, 2))
files = st.lists(row, max_size=12)


def keys(rows: list[tuple[int, int]]) -> Keys:
    return Keys(np.array([at for at, _ in rows], np.int64), np.array([value for _, value in rows], np.uint64))


def imported(held: list[tuple[int, int]], file: list[tuple[int, int]], part_size: int) -> list[tuple[int, int]]:
    """The store after the file was read in, in parts."""
    held, so_far = list(held), FileSoFar()
    for start in range(0, len(file), part_size):
        part = file[start:start + part_size]
        verdict = judge_part(keys(part), earlier=so_far.at_instants_of(keys(part)), held=keys(held),
                             held_by_rival=np.zeros(len(held), bool))
        assert not verdict.is_contradicted.any()
        so_far.add(keys(part))
        held += [each for each, known in zip(part, verdict.is_known, strict=True) if not known]
    return held


@settings(deadline=None, max_examples=60)
@given(files, files, st.integers(1, 5))
def test_the_larger_count_is_held(first, second, part_size):
    held = imported(imported([], first, part_size), second, part_size)
    assert Counter(held) == Counter(first) | Counter(second)          # Counter's | takes the larger count


@settings(deadline=None, max_examples=60)
@given(files, st.integers(1, 5), st.integers(1, 5))
def test_again_changes_nothing(file, part_size, other_size):
    held = imported([], file, part_size)
    assert imported(held, file, other_size) == held


@settings(deadline=None, max_examples=60)
@given(files, st.integers(0, 12), st.integers(0, 12), st.integers(1, 5))
def test_grown_and_rotated_files_add_only_what_is_new(file, grown_from, cut_to, part_size):
    held = imported(imported([], file[:grown_from], part_size), file, part_size)
    assert Counter(held) == Counter(file)
    assert imported(held, file[cut_to:], part_size) == held


def rival_verdict(held: list[tuple[int, int]], file: list[tuple[int, int]]):
    return judge_part(keys(file), earlier=keys([]), held=keys(held), held_by_rival=np.ones(len(held), bool))


def test_a_corrected_mapping_does_not_double_the_instants():
    verdict = rival_verdict([(1, 10), (2, 20)], [(1, 11), (2, 21), (3, 31)])
    assert verdict.is_contradicted.tolist() == [True, True, False] and not verdict.is_known.any()


def test_another_reading_at_an_instant_that_the_file_repeats_is_new():
    verdict = rival_verdict([(1, 10)], [(1, 10), (1, 11)])
    assert verdict.is_known.tolist() == [True, False] and not verdict.is_contradicted.any()


def test_keys_are_by_value():
    names = ("port1", "port2")
    at_us = np.zeros(2, np.int64)
    plain = keys_of(at_us, {"port1": np.array([0.0, 1.0]), "port2": np.array([np.nan, np.nan])}, names)
    other = keys_of(at_us, {"port1": np.array([-0.0, 1.0])}, names)
    assert plain.content.tolist() == other.content.tolist() and plain.content[0] != plain.content[1]
    swapped = keys_of(at_us, {"port2": np.array([0.0, 1.0])}, names)
    assert swapped.content[1] != plain.content[1]


@given(st.lists(st.tuples(st.floats(allow_nan=False), st.floats(allow_nan=False)), min_size=2, max_size=50, unique=True))
def test_different_values_have_different_keys(pairs):
    pairs = list(dict.fromkeys((one + 0.0, two + 0.0) for one, two in pairs))
    columns = {"port1": np.array([one for one, _ in pairs]), "port2": np.array([two for _, two in pairs])}
    assert len(set(keys_of(np.zeros(len(pairs), np.int64), columns, ("port1", "port2")).content.tolist())) == len(pairs)
