"""The choice between wandering and turning back keeps its error rate."""

import numpy as np

from analysis.outlook.drift_model import DriftModel, choose_model
from tests.analysis.outlook.records import reverting, walk


def test_a_walk_is_called_reverting_once_in_twenty():
    """D. A. Dickey, W. A. Fuller, J. Am. Stat. Assoc. 74, 427 (1979): quantiles -2.57, -2.86, -3.43 of τ_μ, from memory."""
    rng = np.random.default_rng(1)
    choices = [choose_model(np.arange(120.0), walk(rng, np.arange(120.0), 0.0, 1.0)) for _ in range(120)]
    for chance in (0.05, 0.10):
        share = np.mean([choice.chance_level <= chance for choice in choices])
        assert abs(share - chance) < 4.0 * np.sqrt(chance * (1 - chance) / 120)


def test_a_plain_return_is_seen():
    choice = choose_model(np.arange(400.0), reverting(np.random.default_rng(2), np.arange(400.0), 0.1, 3.0, 1.0))
    assert choice.model is DriftModel.REVERTING and choice.chance_level == 0.01 and choice.likelihood_ratio > 11.8


def test_short_and_still_records_stay_walks():
    short = choose_model(np.arange(20.0), np.random.default_rng(3).normal(size=20))
    still = choose_model(np.arange(50.0), np.full(50, 2.0))
    for choice in (short, still):
        assert choice.model is DriftModel.WALK and choice.reverting is None and choice.chance_level == 1.0
