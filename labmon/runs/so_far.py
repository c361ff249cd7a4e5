"""What a run that is under way has come to, a little at a time: the ledger's own classes, up to a moment ago. The beat's.

Readings that come late are not counted here; the ledger made after the end has them.
"""

from datetime import datetime, timedelta
from typing import Final

import numpy as np
from django.db import transaction
from django.utils import timezone

from analysis.judge.ledger import Account, Intervals, Totals, add_tap, intervals_of, joined, totals_of
from analysis.judge.ledger_tap import Ruling, TapFold, fold_tap
from analysis.judge.rule import Quantity
from ingest.times import us_of
from labmon.benches.pace import interval_of
from labmon.live.publish import publish
from labmon.runs.ledger_body import packed, unpacked
from labmon.runs.limits import ruling_limits
from labmon.runs.models import Run, RunSoFar
from labmon.runs.queries import declared_runs
from labmon.runs.samples import stretches_of

#: Readings of the last seconds are given so long to arrive; a pass accounts for so much at most.
LAG: Final = timedelta(seconds=10)
LONGEST_PASS: Final = timedelta(hours=2)
SHORTEST_PASS_S: Final = 10


def account_for_runs(now: datetime | None = None) -> list[int]:
    """Bring every run that is under way up to date; safe to run twice and side by side. Returns the runs' ids."""
    clock = now or timezone.now()
    under_way = declared_runs().filter(starts_at__lte=clock, over__gt=clock).exclude(limits_noted_at=None)
    return [run.pk for run in under_way.order_by("pk") if _account_for(run, clock)]


@transaction.atomic
def _account_for(run: Run, now: datetime) -> bool:
    """One pass; False where it is not due yet, or another worker has the run."""
    row, _ = RunSoFar.objects.get_or_create(run=run, defaults={"through_at": run.starts_at})
    held = RunSoFar.objects.select_for_update(skip_locked=True).filter(pk=row.pk).first()
    if held is None:
        return False
    until = min(now - LAG, run.over_at, held.through_at + LONGEST_PASS).replace(microsecond=0)
    if (until - held.through_at).total_seconds() < SHORTEST_PASS_S:
        return False
    account = _account(run, held.through_at, until)
    totals = totals_of(account)
    for name in ("good_s", "below_s", "untrusted_s", "no_reading_s", "doubtful_s"):
        setattr(held, name, getattr(held, name) + getattr(totals, name))
    behind = round((held.through_at - run.starts_at).total_seconds())
    held.body = packed(_appended(intervals_so_far(held), intervals_of(account), behind))
    held.through_at = until
    held.save()
    publish({"kind": "runs", "ids": [run.pk], "experiments": [run.experiment_id]})
    return True


def _account(run: Run, from_at: datetime, until_at: datetime) -> Account:
    rulings = ruling_limits(run)
    account = Account.of(round((until_at - from_at).total_seconds()))
    for tap in run.taps.select_related("station").order_by("station__name", "name"):
        own = [
            Ruling(Quantity(one.limit.quantity), one.version.alarm, us_of(one.from_at), us_of(one.until_at))
            for one in rulings
            if one.limit.tap_id == tap.pk
        ]
        state, parts = TapFold(), []
        for stretch in stretches_of(tap, us_of(from_at), us_of(until_at), interval_of(tap)):
            state, seconds = fold_tap(
                state, stretch.samples, own, stretch.from_us, stretch.until_us,
                next_at_us=stretch.next_at_us, interval_s=tap.interval_s,
            )
            if stretch.from_us >= us_of(from_at):
                parts.append(seconds)
        add_tap(account, joined(parts))
    return account


def intervals_so_far(row: RunSoFar) -> Intervals:
    """The stretches accounted for, in seconds of the run."""
    return unpacked(row.body) if row.body else intervals_of(Account.of(0))


def totals_so_far(row: RunSoFar) -> Totals:
    """Their sums; the longest good stretch is left to the ledger."""
    length = row.good_s + row.below_s + row.untrusted_s + row.no_reading_s
    return Totals(length, row.good_s, row.below_s, row.untrusted_s, row.no_reading_s, row.doubtful_s, 0, None)


def _appended(before: Intervals, after: Intervals, behind_s: int) -> Intervals:
    """Both, one after the other; the stretch that goes on over the seam stays one."""
    if not len(before):
        return after
    same = len(after) and all(
        getattr(before, name)[-1] == getattr(after, name)[0] for name in ("klass", "is_doubtful", "taps")
    )
    values = {name: np.concatenate([getattr(before, name), getattr(after, name)]) for name in Intervals.__dataclass_fields__}
    values["first_s"][len(before) :] += behind_s
    if same:
        seam = len(before)
        values["length_s"][seam - 1] += values["length_s"][seam]
        values["why"][seam - 1] |= values["why"][seam]
        values = {name: np.delete(array, seam) for name, array in values.items()}
    return Intervals(**values)
