"""Minutes of several taps at once, of open days and of closed ones."""

import numpy as np
import pytest

from analysis.record.tap_minutes import minutes_of
from labmon.pipeline.catch_up import catch_up
from tests.factories import NOON_US, make_tap, store_readings

pytestmark = pytest.mark.django_db
S, MINUTE_US, DAY_US = 1_000_000, 60_000_000, 86_400_000_000


@pytest.mark.parametrize("after_us", [600 * S, 3 * DAY_US], ids=["open day", "closed day"])
def test_minutes_hold_what_was_read(after_us):
    """20 dB is 11.42° on the sphere (tan²(γ/2) = 10^(-ER/10), F-02); a port that gives no power is untrusted."""
    tap, other = make_tap(), make_tap()
    at_us = NOON_US + np.arange(300) * S
    port1 = np.full(300, 1e-3)
    port1[60:90] = -1.0
    keep = np.r_[0:180, 240:300]
    store_readings(tap, at_us[keep], port1=port1[keep], port2=1e-5, sequence=keep, boot="b")
    store_readings(other, at_us[:60], port1=1e-3, port2=1e-4, sequence=np.arange(60), boot="b")
    catch_up(NOON_US + after_us)
    spans = {tap.pk: (NOON_US - MINUTE_US, NOON_US + 6 * MINUTE_US), other.pk: (NOON_US, NOON_US + 2 * MINUTE_US)}
    found = minutes_of(spans)
    assert found[tap.pk].count.tolist() == [0, 60, 60, 60, 0, 60, 0] and found[other.pk].count.tolist() == [60, 0]
    assert found[tap.pk].trusted_us[[1, 2]].tolist() == [60 * S, 30 * S]
    np.testing.assert_allclose(found[tap.pk].angle_deg()[1:4], 11.4211863, atol=1e-4)
    assert np.isnan(found[tap.pk].angle_deg()[[0, 4, 6]]).all() and minutes_of({}) == {}
