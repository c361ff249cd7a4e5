"""Which changes of a limit loosen it."""

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.fold import FoldState, episodes_of, fold
from analysis.judge.loosened import loosened_parts
from analysis.judge.rule import LimitRule, Quantity
from tests.analysis.judge.samples import er_seconds

ER = LimitRule(quantity=Quantity.ER_DB, alarm=20.0, warning=23.0)
ANGLE = LimitRule(quantity=Quantity.ANGLE_DEG, alarm=20.0, warning=15.0)


@pytest.mark.parametrize(
    ("before", "changed", "parts"),
    [
        (ER, {"alarm": 17.0}, ("alarm",)),
        (ER, {"alarm": 21.0}, ()),
        (ER, {"warning": None}, ("warning",)),
        (ER, {"warning": 22.0}, ("warning",)),
        (replace(ER, warning=None), {"warning": 25.0}, ()),
        (ER, {"on_delay_s": 61.0}, ("on_delay_s",)),
        (ER, {"on_delay_s": 5.0, "off_delay_s": 120.0, "deadband": 2.0}, ()),
        (ER, {"off_delay_s": 5.0, "deadband": 0.5}, ("off_delay_s", "deadband")),
        (ANGLE, {"alarm": 25.0}, ("alarm",)),
        (ANGLE, {"alarm": 19.0, "warning": 14.0}, ()),
        (ANGLE, {"warning": 16.0}, ("warning",)),
        (replace(ER, window_s=600.0), {"window_s": 1200.0}, ("window_s",)),
    ],
)
def test_parts(before, changed, parts):
    assert loosened_parts(before, replace(before, **changed)) == parts


def test_rules_of_two_quantities_are_not_compared():
    with pytest.raises(ValueError, match="one quantity"):
        loosened_parts(ER, ANGLE)


@given(
    st.lists(st.floats(15.0, 30.0), min_size=1, max_size=80),
    st.floats(16.0, 24.0), st.floats(0.0, 3.0), st.integers(0, 5), st.integers(0, 5), st.floats(0.0, 2.0),
    st.floats(0.0, 2.0),
)  # fmt: skip
def test_what_only_tightens_is_never_quiet_where_the_old_was_open(er_db, alarm, tighter, delay_s, shorter_s, deadband, more):
    """While the old limit has an episode open, the tightened one has one too: nothing is called later or ends sooner."""
    before = LimitRule(quantity=Quantity.ER_DB, alarm=alarm, on_delay_s=delay_s, off_delay_s=delay_s, deadband=deadband)
    after = replace(before, alarm=alarm + tighter, on_delay_s=max(delay_s - shorter_s, 0), off_delay_s=delay_s + shorter_s,
                    deadband=deadband + more)
    assert loosened_parts(before, after) == ()
    seconds = er_seconds(er_db)
    was, is_now = (episodes_of(fold(rule, FoldState(), seconds, 1.0)[1]) for rule in (before, after))
    for old in was:
        assert any(
            new.raised_us <= old.raised_us
            and (new.returned_us is None or (old.returned_us is not None and new.returned_us >= old.returned_us))
            for new in is_now
        )
