"""Back-tests over stored readings, counted by hand; passes that may be begun and walked twice."""

from datetime import timedelta

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from ingest.times import at_of
from labmon.audit.models import AuditEntry
from labmon.clearance.back_tests import ask_for_back_test, begin_nightly, store_back_test, walk_due
from labmon.clearance.limits import limits_at
from labmon.clearance.models import BackTestDue, BackTestPass, LimitBackTest
from labmon.clearance.told import nights_of
from labmon.errors import NotAllowed
from labmon.experiments.actions import retire_limit
from labmon.logbook.models import LogEntry
from labmon.people.models import Role
from tests.factories import make_person
from tests.labmon.clearance.bench import DAY_US, HOUR_US, MONDAY_US, bench_with
from tests.labmon.clearance.bench import nights_of as angles_of

pytestmark = pytest.mark.django_db


def stored(experiment, now_us):
    return store_back_test(limits_at(experiment, at_of(now_us))[0], at_of(now_us))


def test_a_recorded_fortnight_by_hand():
    """Two weeks from Monday on, all at 3°; on the nights of the second Wednesday (9) and Friday (11) it rises by 9°.

    Told are nights with 7 of their kind (pooled) before them: 7 to 13. Working nights 7 to 11 look at working nights only where
    7 are there: night 9 looks at 0-4, 7, 8 (7 nights); before that days are pooled.
    Night 7 (Monday): 0-6, 7 of 7. Night 8: working 0-4, 7 = 6, so pooled: 8 of 8. Night 9: 7 of 7, fails. Night 10: working
    0-4, 7, 8, 9: 7 of 8. Night 11: 8 of 9, fails. Nights 12, 13 (weekend): pooled: 10 of 12, 11 of 13.
    """
    experiment, tap, now_us = bench_with(angles_of(14, {9: 9.0, 11: 9.0}))
    LogEntry.objects.create(station=tap.station, at=at_of(MONDAY_US + 9 * DAY_US + 2 * HOUR_US), text="cleaner", tag="touched")
    kept = stored(experiment, now_us + HOUR_US)
    told = [night for night in nights_of(kept.nights) if night.count >= 7]
    assert [(night.start_us - MONDAY_US) // DAY_US for night in told] == [7, 8, 9, 10, 11, 12, 13]
    assert [(night.held, night.count) for night in told] == [(7, 7), (8, 8), (7, 7), (7, 8), (8, 9), (10, 12), (11, 13)]
    assert [night.has_held for night in told] == [True, True, False, True, False, True, True]
    failed = next(night for night in told if not night.has_held)
    assert failed.failed_at_us == failed.start_us + 2 * HOUR_US and failed.labels == ("touched: cleaner",)
    facts = kept.facts
    assert (facts["windows"], facts["not_told"], facts["cleared"]) == (7, 6, 0)
    by_hand = (0 + 0 + 1 + (1 / 8) ** 2 + (8 / 9) ** 2 + (2 / 12) ** 2 + (2 / 13) ** 2) / 7
    assert facts["replay"]["score"] == pytest.approx(by_hand) and facts["margin"]["score"] == pytest.approx(2 / 7)
    assert (facts["margin"]["cleared"], facts["margin"]["cleared_held"]) == (7, 5)
    assert [(row["count"], row["came_true"]) for row in facts["table"]] == [(4, 3), (3, 2)]


def test_wrong_clearances_are_kept():
    """22 calm working days, then a night that fails: cleared from 14 working nights on, and wrong."""
    experiment, _, now_us = bench_with(angles_of(26, {24: 9.0}))
    facts = stored(experiment, now_us + HOUR_US).facts
    assert len(facts["wrong"]) == 1 and (facts["wrong"][0][0] - MONDAY_US) // DAY_US == 24
    assert facts["cleared"] - facts["cleared_held"] == 1


def test_a_pass_walks_each_limit_once_and_sums_up_the_lab():
    first, _, now_us = bench_with(angles_of(12))
    second, _, _ = bench_with(angles_of(12, {9: 9.0}), name="north-2")
    third, _, _ = bench_with(angles_of(3), name="north-3")
    retire_limit(third.limits.get(), by=None, reason="over")
    now = at_of(now_us + HOUR_US)
    begun = ask_for_back_test(by=make_person(Role.RESEARCHER))
    assert begun.total == 2 and ask_for_back_test(by=make_person(Role.MANAGER)).pk == begun.pk
    assert AuditEntry.objects.filter(action="ask for back-test").count() == 2
    assert walk_due(now, for_s=0.0) == 0 and BackTestDue.objects.count() == 2
    assert walk_due(now) == 2 and walk_due(now) == 0
    begun.refresh_from_db()
    assert begun.ended_at == now and not BackTestDue.objects.exists()
    own = {row.limit.experiment_id: row.facts for row in LimitBackTest.objects.select_related("limit")}
    assert set(own) == {first.pk, second.pk}
    assert begun.facts["windows"] == sum(facts["windows"] for facts in own.values())
    again = ask_for_back_test(by=make_person(Role.MANAGER))
    walk_due(now)
    again.refresh_from_db()
    assert again.pk != begun.pk and again.facts == begun.facts and LimitBackTest.objects.count() == 2


def test_the_nights_pass_is_begun_once():
    now = at_of(MONDAY_US)
    assert begin_nightly(now).total == 0
    walk_due(now)
    assert begin_nightly(now + timedelta(hours=2)) is None
    assert begin_nightly(now + timedelta(days=1)) is not None and BackTestPass.objects.count() == 2


def test_a_guest_may_not_ask():
    with pytest.raises(NotAllowed):
        ask_for_back_test(by=make_person(Role.GUEST))


def test_a_limit_costs_a_steady_number_of_queries():
    few, _, now_us = bench_with(angles_of(3))
    many, _, later_us = bench_with(angles_of(14), name="north-2")
    counts = []
    for experiment, at_us in ((few, now_us), (many, later_us)):
        asked = limits_at(experiment, at_of(at_us))[0]
        with CaptureQueriesContext(connection) as queries:
            store_back_test(asked, at_of(at_us))
        counts.append(len(queries))
    assert counts[0] == counts[1]
