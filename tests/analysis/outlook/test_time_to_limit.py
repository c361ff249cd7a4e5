"""Time to the limit, in degrees."""

import numpy as np
import pytest

from analysis.outlook.drift_model import DriftModel
from analysis.outlook.time_to_limit import Outlook, time_to_er_limit, time_to_limit
from analysis.quantities import er_db_from_angle_rad
from tests.analysis.outlook.records import reverting, walk

DAY_S = 86_400.0


def rising(deg_per_h=2.0, noise=0.01, minutes=120):
    at_s = 60.0 * np.arange(minutes)
    return at_s, 3.0 + deg_per_h / 3600.0 * at_s + np.random.default_rng(1).normal(0, noise, minutes)


def test_two_degrees_an_hour_and_four_left_are_two_hours():
    """JOB 7a, job 6."""
    at_s, angle_deg = rising()
    answer = time_to_limit(at_s, angle_deg, float(angle_deg[-1]) + 4.0, horizon_s=DAY_S)
    assert answer.outlook is Outlook.WITHIN and answer.margin_deg == pytest.approx(4.0)
    assert answer.median.time_s == pytest.approx(7200.0, rel=0.05)
    assert answer.median.low_s < 7200.0 < answer.median.high_s and answer.tenth.time_s < answer.median.time_s


def test_falling_er_is_rising_angle():
    at_s, angle_deg = rising()
    er_db = er_db_from_angle_rad(np.radians(angle_deg))
    by_angle = time_to_limit(at_s, angle_deg, 11.0, horizon_s=DAY_S)
    by_er = time_to_er_limit(at_s, er_db, float(er_db_from_angle_rad(np.radians(11.0))), horizon_s=DAY_S)
    assert np.all(np.diff(er_db[::40]) < 0.0) and by_er.median.time_s == pytest.approx(by_angle.median.time_s, rel=1e-9)


def test_no_limit_is_reached_is_an_answer():
    at_s, angle_deg = rising(deg_per_h=-1.0)
    answer = time_to_limit(at_s, angle_deg, 12.0, horizon_s=DAY_S)
    assert answer.outlook is Outlook.NOT_WITHIN and np.isinf(answer.median.time_s) and answer.reached < 0.1


def test_beyond_and_too_short():
    at_s, angle_deg = rising()
    assert time_to_limit(at_s, angle_deg, 2.0, horizon_s=DAY_S).outlook is Outlook.BEYOND
    short = time_to_limit(at_s[:2], angle_deg[:2], 20.0, horizon_s=DAY_S)
    assert short.outlook is Outlook.TOO_SHORT and np.isnan(short.median.time_s) and short.choice is None
    empty = time_to_limit(at_s, np.full(len(at_s), np.nan), 20.0, horizon_s=DAY_S)
    assert empty.outlook is Outlook.TOO_SHORT and np.isnan(empty.margin_deg)


def test_a_level_that_turns_back_has_more_time():
    at_s = 60.0 * np.arange(1440)
    angle_deg = reverting(np.random.default_rng(8), at_s, 1 / 900, 3.0, 0.5)
    answer = time_to_limit(at_s, angle_deg, 5.5, horizon_s=7 * DAY_S)
    walked = time_to_limit(at_s[-29:], angle_deg[-29:], 5.5, horizon_s=7 * DAY_S)
    assert answer.choice.model is DriftModel.REVERTING and walked.choice.model is DriftModel.WALK
    assert answer.tenth.time_s > walked.tenth.time_s
    assert answer.tenth.low_s <= answer.tenth.time_s <= answer.tenth.high_s


@pytest.mark.parametrize("limit_deg", [10.0, 13.0])
def test_a_level_that_settles_above_or_below_its_limit(limit_deg):
    """From 2° towards 12° with θ = 1/h; without noise 10° is reached ln((12 - now)/2) hours from now, 13° hardly ever."""
    at_s = 30.0 * np.arange(120)
    noise = reverting(np.random.default_rng(5), at_s, 1 / 3600, 0.0, 0.05)
    angle_deg = 12.0 - 10.0 * np.exp(-at_s / 3600.0) + noise
    answer = time_to_limit(at_s, angle_deg, limit_deg, horizon_s=5 * DAY_S)
    assert answer.choice.model is DriftModel.REVERTING and answer.choice.reverting.mean == pytest.approx(12.0, abs=1.0)
    if limit_deg == 10.0:
        assert answer.median.time_s == pytest.approx(3600.0 * np.log((12.0 - angle_deg[-1]) / 2.0), rel=0.2)
    else:
        assert answer.outlook is not Outlook.WITHIN


def test_coarse_watching_sees_it_later():
    at_s = 60.0 * np.arange(400)
    angle_deg = walk(np.random.default_rng(3), at_s, 0.0, 0.01)
    limit_deg = float(angle_deg[-1]) + 0.5
    fine, coarse = (time_to_limit(at_s, angle_deg, limit_deg, horizon_s=30 * DAY_S, sampling_s=step) for step in (0.0, 600.0))
    assert coarse.tenth.time_s > fine.tenth.time_s


@pytest.mark.slow
def test_bands_cover_the_true_median():
    """100 walks of 300 steps, drift 1e-3, spread 0.05: where a walk is found, the band holds the true median in at least 90 %."""
    from analysis.outlook.drifted_walk import passage_quantile_s

    rng, at_s, covered, walks = np.random.default_rng(9), np.arange(300.0), 0, 0
    for _ in range(100):
        angle_deg = walk(rng, at_s, 1e-3, 0.05)
        answer = time_to_limit(at_s, angle_deg, float(angle_deg[-1]) + 2.0, horizon_s=1e6)
        if answer.choice.model is not DriftModel.WALK:
            continue
        walks += 1
        covered += answer.median.low_s <= float(passage_quantile_s(2.0, 1e-3, 0.05, 0.5)) <= answer.median.high_s
    assert walks >= 85 and covered >= 0.9 * walks


@pytest.mark.parametrize("wrong", [{"limit_deg": 0.0}, {"horizon_s": np.inf}, {"sampling_s": -1.0}])
def test_senseless_questions_are_refused(wrong):
    at_s, angle_deg = rising()
    with pytest.raises(ValueError, match="horizon_s"):
        time_to_limit(at_s, angle_deg, **({"limit_deg": 10.0, "horizon_s": DAY_S} | wrong))


def test_a_calm_bench_far_inside_its_limit_overflows_nothing():
    """White noise of 0.3 dB at 28 dB: 27 dB is near, 20 dB about 50 spreads of the angle away: not within any horizon."""
    at_s = np.arange(60) * 60.0
    er_db = 28.0 + np.random.default_rng(3).normal(0.0, 0.05, 60)
    found = time_to_er_limit(at_s, er_db, 20.0, horizon_s=3600.0, sampling_s=60.0)
    assert found.outlook is Outlook.NOT_WITHIN and found.reached == 0.0 and np.isinf(found.tenth.low_s)
