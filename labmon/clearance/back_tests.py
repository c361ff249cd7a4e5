"""The rule asked about its own past: every stored night of every limit, from earlier nights only; nightly and on demand.

Safe to run twice and by several workers: a limit is taken by locking its row of what is due, its result is stored by its natural
key, and the pass ends when nothing is due any more.
"""

import logging
import time
from datetime import UTC, date, datetime, timedelta
from typing import Final

from django.db import transaction
from django.utils import timezone

from analysis.outlook.backtest import BackTestRow, summed_up, walk_forward_angles, walk_forward_sops
from ingest.times import us_of
from labmon.audit.actions import note
from labmon.claims import lock_name
from labmon.clearance.history import limit_history
from labmon.clearance.limits import ON_ANGLE, AskedLimit, asked_limits
from labmon.clearance.models import BackTestDue, BackTestPass, LimitBackTest
from labmon.clearance.told import back_test_facts, nights_of, told_list
from labmon.experiments.models import LimitVersion
from labmon.live.publish import publish
from labmon.people.models import Person
from labmon.people.rights import Action, require

log = logging.getLogger(__name__)

#: The night that is asked about: 12 h from 20:00 UTC (the usual run of this trade; common practice, no source).
NIGHT_FROM_H: Final = 20
NIGHT_S: Final = 43_200.0
#: So many passes are kept, for how the figures went.
KEPT_PASSES: Final = 400


def ask_for_back_test(*, by: Person) -> BackTestPass:
    """Begin a pass for a person; where one is under way, that one."""
    require(by, Action.PLAN_RUN)
    with transaction.atomic():
        begun = _begun(by, None)
        note(by, "ask for back-test", f"back-test/{begun.pk}", after={"limits": begun.total})
        return begun


@transaction.atomic
def begin_nightly(now: datetime | None = None) -> BackTestPass | None:
    """Begin the night's pass; None where it was begun already."""
    night = (now or timezone.now()).date()
    return None if BackTestPass.objects.filter(night=night).exists() else _begun(None, night)


def _begun(by: Person | None, night: date | None) -> BackTestPass:
    lock_name("back-test")
    under_way = BackTestPass.objects.filter(ended_at=None).first()
    if under_way is not None:
        return under_way
    limits = [asked.limit_id for asked in limits_to_test()]
    begun = BackTestPass.objects.create(night=night, asked_by=by, total=len(limits))
    BackTestDue.objects.bulk_create([BackTestDue(of=begun, limit_id=limit_id) for limit_id in limits])
    old = BackTestPass.objects.exclude(ended_at=None).order_by("-pk").values_list("pk", flat=True)[KEPT_PASSES:]
    BackTestPass.objects.filter(pk__in=list(old)).delete()
    _tell(begun)
    return begun


def limits_to_test() -> list[AskedLimit]:
    """Every limit on ER or angle that is in force."""
    quantities = [one.value for one in ON_ANGLE]
    newest = LimitVersion.objects.filter(limit__quantity__in=quantities).order_by("limit_id", "-number").distinct("limit_id")
    return asked_limits(newest.select_related("limit__tap__station"))


def walk_due(now: datetime | None = None, *, for_s: float = float("inf")) -> int:
    """Walk what is due as ``for_s`` seconds allow; returns how many limits were walked."""
    clock, began, walked = now or timezone.now(), time.monotonic(), 0
    while time.monotonic() - began < for_s and _walk_one(clock):
        walked += 1
    _end_done(clock)
    return walked


@transaction.atomic
def _walk_one(now: datetime) -> bool:
    """One due limit that nobody else works on; False where none is left."""
    due = BackTestDue.objects.select_for_update(skip_locked=True, of=("self",)).order_by("pk").first()
    if due is None:
        return False
    version = (LimitVersion.objects.filter(limit=due.limit_id).select_related("limit__tap__station")
               .order_by("-number").first())
    for asked in asked_limits([version] if version else []):
        store_back_test(asked, now)
    due.delete()
    _tell(due.of)
    return True


def store_back_test(asked: AskedLimit, now: datetime) -> LimitBackTest:
    """Walk one limit's nights and keep what would have been said of each. What cannot be computed is said, not hidden."""
    began = time.monotonic()
    try:
        rows, fault = walked(asked, now), ""
    except ValueError as error:
        log.exception("back_test_failed", extra={"limit_id": asked.limit_id})
        rows, fault = (), str(error)
    told = [row.told() for row in rows]
    facts = back_test_facts(summed_up(told)) | {"fault": fault}
    kept, _ = LimitBackTest.objects.update_or_create(limit_id=asked.limit_id, defaults={
        "made_at": now, "took_s": time.monotonic() - began, "alarm": asked.alarm,
        "nights": [told_list(night) for night in told], "facts": facts})
    return kept


def walked(asked: AskedLimit, now: datetime) -> tuple[BackTestRow, ...]:
    """Every stored night of a limit, oldest first: what would have been said, and what came out."""
    tonight = datetime(now.year, now.month, now.day, NIGHT_FROM_H, tzinfo=UTC)
    start = tonight if tonight > now else tonight + timedelta(days=1)
    history = limit_history(asked, us_of(start), NIGHT_S, us_of(now), allows_air=False)
    if history.paths is None:
        return ()
    windows, changes = history.paths.windows, history.happened.changed_at_us
    if history.wanted is None:
        return walk_forward_angles(windows, asked.limit_rad, changed_at_us=changes, length_s=NIGHT_S)
    return walk_forward_sops(windows, asked.limit_rad, wanted=history.wanted, changed_at_us=changes, length_s=NIGHT_S)


@transaction.atomic
def _end_done(now: datetime) -> None:
    """End the pass once nothing is due: the lab's sum over all limits in force."""
    open_ones = BackTestPass.objects.select_for_update(skip_locked=True, of=("self",)).filter(ended_at=None)
    done = open_ones.filter(due=None).first()
    if done is None:
        return
    kept = LimitBackTest.objects.filter(limit_id__in=[asked.limit_id for asked in limits_to_test()])
    nights = [night for rows in kept.values_list("nights", flat=True) for night in nights_of(rows)]
    done.facts, done.ended_at = back_test_facts(summed_up(nights)), now
    done.save(update_fields=["facts", "ended_at"])
    _tell(done)
    log.info("back_test_ended", extra={"limits": done.total, "nights": len(nights)})


def _tell(one: BackTestPass) -> None:
    publish({"kind": "backtest", "ids": [one.pk]})
