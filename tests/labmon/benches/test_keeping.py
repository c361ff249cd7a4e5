"""Raw readings go only by a rule, whole days at a time, each with its audit row; what was made of them stays."""

import numpy as np
import pytest
from django.core.management import call_command

from analysis.models import RollupDue, RollupPage
from analysis.record.rollups import history
from ingest.models import Block, DayFile, ForgottenDay, LeftFile
from ingest.store.days.faults import known_holes
from ingest.store.days.seal import seal_days
from ingest.store.read import HoleKind, find_readings
from labmon.alarms.models import Alarm
from labmon.audit.models import AuditEntry
from labmon.benches.keeping import end_keep_rule, forget_old_days, set_keep_rule
from labmon.errors import NotAllowed, WriteError
from labmon.people.models import Role
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.nightly import make_day_statistics
from labmon.pipeline.process import process_touched
from labmon.pipeline.rolling import compact_closed_days, roll_up_due
from tests.factories import make_person, make_tap, store_readings

pytestmark = pytest.mark.django_db
S = 1_000_000
DAY = 86_400 * S
DAY_US = 1_750_000_000 * S // DAY * DAY
EVER = (-(2**62), 2**62)
NOW_US = DAY_US + 40 * DAY


def old_days(tap, days=(0, 1, 35)):
    """An hour of readings at noon of some days, judged, rolled up, sealed."""
    for day in days:
        at_us = DAY_US + day * DAY + DAY // 2 + np.arange(0, 3600, 2) * S
        store_readings(tap, at_us, port1=1e-3, port2=1e-6)
    catch_up(now_us=NOW_US)
    compact_closed_days(NOW_US)
    make_day_statistics(NOW_US)
    seal_days(NOW_US)


def test_without_a_rule_nothing_goes():
    tap = make_tap()
    old_days(tap)
    assert forget_old_days(NOW_US) == 0 and DayFile.objects.count() == 3
    set_keep_rule(None, None, by=None)
    assert forget_old_days(NOW_US) == 0


def test_days_past_the_rule_go_with_an_audit_row_each_and_their_rollups_stay():
    tap, boss = make_tap(), make_person(Role.MANAGER, username="maren")
    old_days(tap)
    pages = RollupPage.objects.count()
    set_keep_rule(None, 30, by=boss, reason="the disk is small")
    assert forget_old_days(NOW_US) == 2 and forget_old_days(NOW_US) == 0
    assert [row.day_us for row in DayFile.objects.all()] == [DAY_US + 35 * DAY] and not Block.objects.exists()
    assert RollupPage.objects.count() == pages and LeftFile.objects.count() == 2
    rows = AuditEntry.objects.filter(action="delete raw readings of a day").order_by("pk")
    assert [row.before["readings"] for row in rows] == [1800, 1800]
    assert {row.person_name for row in rows} == {"rule, set by maren"}
    assert rows[0].reason == "raw of the lab kept at least 30 days, set by maren"
    assert rows[0].subject == f"tap/{tap.station.name}/{tap.name}" and rows[0].before["day"] == "2025-06-15"
    found = find_readings(tap.pk, *EVER)
    assert len(found.readings) == 1800 and [hole.kind for hole in found.holes] == [HoleKind.NOT_KEPT] * 2
    assert [hole.from_us for hole in known_holes(tap.pk, DAY_US, DAY_US + DAY)] == [DAY_US]


def test_a_day_is_kept_at_least_as_long_as_the_rule_says():
    tap = make_tap()
    old_days(tap, days=(0,))
    set_keep_rule(tap, 30, by=None)
    assert forget_old_days(DAY_US + 31 * DAY - 1) == 0 and DayFile.objects.count() == 1
    assert forget_old_days(DAY_US + 31 * DAY) == 1


def test_a_taps_own_rule_stands_before_the_labs():
    kept, gone = make_tap(), make_tap()
    for tap in (kept, gone):
        old_days(tap, days=(0,))
    set_keep_rule(None, 10, by=None)
    set_keep_rule(kept, None, by=None)
    assert forget_old_days(NOW_US) == 1 and DayFile.objects.get().tap == kept
    end_keep_rule(kept, by=None)
    assert forget_old_days(NOW_US) == 1


def test_a_day_whose_rollups_are_not_made_waits(caplog):
    tap = make_tap()
    old_days(tap, days=(0,))
    set_keep_rule(tap, 1, by=None)
    RollupDue.objects.create(tap=tap, first_at_us=DAY_US + 5, last_at_us=DAY_US + 6)
    assert forget_old_days(NOW_US) == 0 and "day_not_forgotten" in caplog.text
    RollupDue.objects.all().delete()
    pages = list(RollupPage.objects.all())
    RollupPage.objects.all().delete()
    assert forget_old_days(NOW_US) == 0 and pages


def test_histories_of_forgotten_days_are_drawn_from_rollups_also_for_short_spans():
    tap = make_tap()
    old_days(tap, days=(0,))
    span = (DAY_US + DAY // 2, DAY_US + DAY // 2 + 1800 * S)
    before = history(tap.pk, "er_db", *span, 300)
    set_keep_rule(tap, 1, by=None)
    forget_old_days(NOW_US)
    after = history(tap.pk, "er_db", *span, 300)
    assert np.isfinite(before.mean).any() and np.isfinite(after.mean).sum() == 180 and after.bucket_s == 10
    np.testing.assert_allclose(after.mean[np.isfinite(after.mean)], 30.0, atol=1e-6)


def test_rolling_up_again_and_late_readings_never_destroy_rollups_of_forgotten_days():
    tap = make_tap()
    old_days(tap, days=(0,))
    day = (DAY_US, DAY_US + DAY)
    before = history(tap.pk, "er_db", *day, 1440)
    set_keep_rule(tap, 1, by=None)
    forget_old_days(NOW_US)
    RollupDue.objects.create(tap=tap, first_at_us=DAY_US, last_at_us=DAY_US + DAY - 1)
    roll_up_due(NOW_US)
    np.testing.assert_array_equal(history(tap.pk, "er_db", *day, 1440).mean, before.mean)
    late_us = np.array([DAY_US + DAY // 2 + 7 * S, DAY_US + 100 * S])
    store_readings(tap, np.sort(late_us), port1=1e-3, port2=1e-4)
    process_touched(now_us=NOW_US)
    roll_up_due(NOW_US)
    after = history(tap.pk, "er_db", *day, 1440)
    noon = np.isfinite(before.mean)
    np.testing.assert_array_equal(after.mean[noon], before.mean[noon])
    assert np.isfinite(after.mean).sum() == noon.sum() + 1, "a minute that had nothing gets its late reading"


def test_only_managers_set_rules_and_days_must_make_sense():
    tap = make_tap()
    with pytest.raises(NotAllowed, match="how long raw"):
        set_keep_rule(tap, 5, by=make_person(Role.OWNER))
    for days in (0, -3, 10**6):
        with pytest.raises(WriteError, match="for ever"):
            set_keep_rule(tap, days, by=None)


def test_the_command_says_what_holds_now():
    tap = make_tap()
    name = f"{tap.station.name}/{tap.name}"
    assert f"raw of {name} kept at least 90 days" in call_command("keep_raw", name, "90", "--reason", "thesis is out")
    assert "raw of the lab kept for ever" in call_command("keep_raw", "lab", "for-ever")
    assert "follows the lab's rule" in call_command("keep_raw", name, "as-the-lab")
    assert [(row.before["raw kept"], row.after["raw kept"]) for row in AuditEntry.objects.order_by("pk")] == [
        ("unset", "at least 90 days"), ("unset", "for ever"), ("at least 90 days", "unset")]
    assert not ForgottenDay.objects.exists() and not Alarm.objects.exists()
