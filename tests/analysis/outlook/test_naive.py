"""The rules of thumb, in their own words."""

import numpy as np
import pytest

from analysis.outlook.naive import margin_rule, past_share
from analysis.quantities import angle_rad_from_er_db


@pytest.mark.parametrize(("er_db", "go"), [(23.01, 1.0), (22.99, 0.0), (40.0, 1.0), (19.0, 0.0)])
def test_three_db_above_the_limit(er_db, go):
    assert margin_rule(float(angle_rad_from_er_db(er_db)), float(angle_rad_from_er_db(20.0))) == go


def test_nothing_is_said_of_nothing():
    assert np.isnan(margin_rule(np.nan, 0.2)) and np.isnan(past_share(np.zeros(0)))


def test_share_of_nights():
    assert past_share(np.array([True, True, False, True])) == 0.75
