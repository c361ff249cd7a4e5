"""Back-tests in words."""

import math

from analysis.outlook.backtest import ToldWindow, summed_up
from analysis.outlook.verdict import Verdict
from labmon.clearance.told import back_test_facts
from labmon.screen.back_test_view import MOST_WRONG, back_test_view, wrong_rows


def night(day, *, held=14, count=14, verdict=Verdict.CLEARED, has_held=True, labels=()):
    start_us = 1_709_841_600_000_000 + day * 86_400_000_000
    return ToldWindow(start_us=start_us, verdict=verdict, held=held, count=count, has_held=has_held, margin_forecast=1.0,
                      past_forecast=0.5, failed_at_us=None if has_held else start_us + 3_600_000_000, labels=labels)


def facts_of(*nights):
    return back_test_facts(summed_up(nights))


def test_one_sentence_for_each_case():
    none = ToldWindow(start_us=0, verdict=Verdict.NOT_ENOUGH, held=0, count=0, has_held=True, margin_forecast=1.0,
                      past_forecast=math.nan, failed_at_us=None, labels=())
    assert back_test_view(facts_of(), "n2").sentence == "No night of n2 has enough earlier ones to be asked about yet."
    assert back_test_view(facts_of(none), "n2").not_told.startswith("For 1 further night there was not enough evidence")
    thin = night(0, count=7, held=7, verdict=Verdict.THIN)
    assert back_test_view(facts_of(thin), "n2").sentence == (
        "Of 1 night of n2 that could be asked about none would have been cleared.")
    assert back_test_view(facts_of(night(0), night(1)), "n2").sentence == "Of 2 cleared nights of n2 every one held."
    assert back_test_view(facts_of(night(0), night(1, has_held=False)), "n2").sentence == (
        "Of 2 cleared nights of n2 1 held and 1 failed.")


def test_rules_beside_each_other():
    """Said 1 twice, came out once: Brier 1/2; the 3 dB rule said go twice too; the past share 1/2 scores 1/4 and never goes."""
    replay, margin, past = back_test_view(facts_of(night(0), night(1, has_held=False)), "n2").rules
    assert (replay.score, margin.score, past.score) == ("0.500", "0.500", "0.250")
    assert replay.held.replace("\xa0", " ") == "1 (50 %)" and margin.clears.replace("\xa0", " ") == "2 (100 %)"
    assert past.held == "–"


def test_wrong_clearances_newest_first_and_bounded():
    many = facts_of(*(night(day, has_held=False, labels=("door",) if day == 59 else ()) for day in range(60)))
    rows, left_out = wrong_rows([("n2", "/experiments/1/", many)])
    assert len(rows) == MOST_WRONG and left_out == 10
    assert (rows[0].known, rows[1].known) == ("door", "nobody knows") and rows[0].began > rows[1].began
