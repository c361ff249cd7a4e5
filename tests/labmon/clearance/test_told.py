"""Back-tests as JSON and back."""

import json
import math

from hypothesis import given
from hypothesis import strategies as st

from analysis.outlook.backtest import ToldWindow, summed_up
from analysis.outlook.verdict import Verdict
from labmon.clearance.told import back_test_facts, nights_of, told_list, told_of

shares = st.floats(0, 1) | st.just(math.nan)
nights = st.builds(
    lambda held, count, **rest: ToldWindow(held=min(held, count), count=count, **rest), held=st.integers(0, 50),
    count=st.integers(7, 50), start_us=st.integers(0, 2**53), verdict=st.sampled_from(Verdict), has_held=st.booleans(),
    margin_forecast=st.sampled_from([0.0, 1.0]), past_forecast=st.floats(0, 1), failed_at_us=st.none() | st.integers(0, 2**53),
    labels=st.lists(st.text(max_size=5), max_size=3).map(tuple))


@given(st.lists(nights, max_size=20))
def test_there_and_back_through_json(some):
    kept = json.loads(json.dumps([told_list(night) for night in some], allow_nan=False))
    assert nights_of(kept) == some
    json.dumps(back_test_facts(summed_up(some)), allow_nan=False)


def test_what_is_not_known_stays_unknown():
    night = ToldWindow(start_us=0, verdict=Verdict.NOT_ENOUGH, held=0, count=0, has_held=True, margin_forecast=1.0,
                       past_forecast=math.nan, failed_at_us=None, labels=())
    back = told_of(json.loads(json.dumps(told_list(night))))
    assert math.isnan(back.past_forecast) and math.isnan(back.share)
    assert back_test_facts(summed_up([night]))["replay"]["score"] is None
