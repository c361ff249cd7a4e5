"""Holds in words."""

from datetime import timedelta

from ingest.models import Station, Tap
from labmon.alarms.models import AlarmHold
from labmon.screen.hold_view import hold_view
from tests.factories import NOON


def hold(**fields):
    tap = Tap(name="eom-in", station=Station(name="n2"))
    usual = {"kind": "shelved", "tap": tap, "reason": "cord", "begun_at": NOON, "until": NOON + timedelta(hours=1)}
    return AlarmHold(**usual | fields)


def test_a_shelving_has_a_name_and_an_end():
    view = hold_view(hold(), NOON, may_end=True)
    assert (view.state, view.what, view.act) == ("shelved by someone who left", "all its alarms", "Unshelve")
    assert view.until.startswith("until 2031-03-04 13:00 UTC, another ")


def test_out_of_service_has_no_end():
    view = hold_view(hold(kind="out-of-service", until=None, alarm_kind="no-reading"), NOON, may_end=False)
    assert (view.until, view.what, view.act) == ("until someone puts it back", "no reading", "Put back")
