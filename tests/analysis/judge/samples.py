"""Judged samples made by hand, for the tests of the folds."""

import numpy as np

from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import Seconds, seconds_of
from analysis.quantities import leak_from_er_db
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.sample import Reduced
from analysis.reduce.tap import TrustContext, reduce_tap
from analysis.reduce.trust import Reason

ER, ANGLE = Quantity.ER_DB, Quantity.ANGLE_DEG
SECOND_US = 1_000_000


def reduced_er(er_db, *, at_s=None, untrusted=(), floor2=0.0) -> Reduced:
    """Two-port samples of a 1 mW tap with the given ER, one a second unless ``at_s`` says otherwise."""
    er_db = np.asarray(er_db, float)
    at_us = np.round(np.asarray(np.arange(len(er_db)) if at_s is None else at_s) * 1e6).astype(np.int64)
    marks = np.zeros(len(er_db), np.uint32)
    marks[list(untrusted)] = int(Reason.TWO_DEVICES)
    columns = {"port1": np.full(len(er_db), 1e-3), "port2": 1e-3 * leak_from_er_db(er_db)}
    return reduce_tap("two-port", "W", at_us, columns, TapCalibration(floor2=floor2), trust_context=TrustContext(marks=marks))


def er_seconds(er_db, **options) -> Seconds:
    return seconds_of(reduced_er(er_db, **options), ER)


def er_rule(**options) -> LimitRule:
    return LimitRule(**({"quantity": ER, "alarm": 20.0, "on_delay_s": 60.0, "off_delay_s": 60.0, "deadband": 1.0} | options))
