"""The sentence says what is wrong first, and exactly how much."""

import pytest

from labmon.screen.standing import WORDS, Standing, lab_sentence, standing_of

S = Standing


@pytest.mark.parametrize(
    ("standings", "sentence"),
    [
        ([S.BELOW, S.BELOW, S.THIN, S.NO_READING, S.WITHIN], "2 benches below their limit, 1 thin, 1 silent."),
        ([S.BELOW], "1 bench below its limit."),
        ([S.THIN, S.WITHIN], "1 bench thin."),
        ([S.NO_READING, S.NO_READING, S.UNTRUSTED, S.UNDECIDED], "2 benches silent, 1 untrusted, 1 undecided."),
        ([S.WITHIN, S.WITHIN, S.NO_LIMIT], "All 2 benches with a limit are within it, 1 without a limit."),
        ([S.WITHIN], "The one bench with a limit is within it."),
        ([S.NEVER_HEARD], "No bench has a limit yet, 1 not heard yet."),
        ([], "No station has joined yet."),
    ],
)
def test_the_lab_in_one_sentence(standings, sentence):
    assert lab_sentence(standings) == sentence


def test_a_calm_lab_names_its_thinnest_bench():
    assert (
        lab_sentence([S.WITHIN] * 3, thinnest="n4, +1.9° · +2.1 dB")
        == "All 3 benches with a limit are within it; thinnest is n4, +1.9° · +2.1 dB."
    )


def test_alarms_that_wait_are_said():
    assert lab_sentence([S.BELOW], unacknowledged=1).endswith("limit. 1 alarm waits for someone.")
    assert lab_sentence([S.WITHIN], unacknowledged=3).endswith("3 alarms wait for someone.")


def test_every_word_names_one_standing():
    assert {standing_of(word) for word in WORDS.values()} == set(Standing)
    assert [standing.rank for standing in Standing] == list(range(len(Standing)))


def test_calm_benches_want_no_look():
    assert {standing for standing in Standing if not standing.wants_a_look} == {S.WITHIN, S.NO_LIMIT, S.NEVER_HEARD}
