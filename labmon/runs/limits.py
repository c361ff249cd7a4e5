"""The limits that rule in a run: copied when it starts, and at each change while it lasts; never made later."""

from dataclasses import dataclass
from datetime import datetime

from django.db.models import Q

from labmon.errors import WriteError
from labmon.experiments.models import Limit, LimitVersion
from labmon.runs.models import Run, RunLimit
from labmon.runs.queries import declared_runs


@dataclass(frozen=True, slots=True)
class RulingLimit:
    """A limit version and the moments, in a run, from and up to which it ruled."""

    version: LimitVersion
    from_at: datetime
    until_at: datetime

    @property
    def limit(self) -> Limit:
        """What it is a version of."""
        return self.version.limit


def note_start_limits(run: Run, now: datetime) -> list[RunLimit]:
    """Copy the limits that were in force at the start of a run that has begun; a second time changes nothing.

    Call it in a transaction that holds the run. What was set between the start and now has been noted as it was set
    (`note_in_runs`), and is not taken for what ruled at the start.
    """
    if run.limits_noted_at is not None:
        return []
    noted_before = run.limits.values_list("limit_version_id", flat=True)
    rows = [
        RunLimit(run=run, limit_version=version, from_at=run.starts_at)
        for version in _in_force(run, run.starts_at)
        if version.pk not in set(noted_before)
    ]
    RunLimit.objects.bulk_create(rows)
    run.limits_noted_at = now
    run.save(update_fields=["limits_noted_at"])
    return rows


def note_in_runs(version: LimitVersion, now: datetime) -> None:
    """Write a new version into the run that is under way on its experiment, from now on."""
    for run in _runs_relying_on(version.limit, now, now):
        begins = max(version.valid_from, now, run.starts_at).replace(microsecond=0)
        RunLimit.objects.get_or_create(run=run, limit_version=version, defaults={"from_at": begins})


def check_not_into_a_run(limit: Limit, valid_from: datetime, now: datetime) -> None:
    """Raises WriteError where a version would begin in the past of a run: what ruled then is on record."""
    for run in _runs_relying_on(limit, valid_from, now):
        raise WriteError(
            "valid_from", f"The run “{run.name}” was under way then.", "Leave it out: the limit holds from now on."
        )


def ruling_limits(run: Run) -> list[RulingLimit]:
    """Which version ruled from when to when in the run, by limit and time; retired stretches are left out.

    Before the run has begun (or before its start was noted): those that would rule if it began with what is in force now.
    """
    rows = [(one.limit_version, one.from_at) for one in _noted(run)]
    if run.limits_noted_at is None:
        known = {version.pk for version, _ in rows}
        rows += [(one, run.starts_at) for one in _in_force(run, run.starts_at) if one.pk not in known]
    by_limit: dict[int, list[tuple[LimitVersion, datetime]]] = {}
    for version, from_at in sorted(rows, key=lambda row: (row[1], row[0].number)):
        by_limit.setdefault(version.limit_id, []).append((version, from_at))
    ruling = []
    for own in by_limit.values():
        ends = [from_at for _, from_at in own[1:]] + [run.over_at]
        ruling += [
            RulingLimit(version, from_at, until_at)
            for (version, from_at), until_at in zip(own, ends, strict=True)
            if not version.is_retired and from_at < until_at
        ]
    return ruling


def _noted(run: Run) -> list[RunLimit]:
    rows = run.limits.select_related("limit_version__limit__tap__station", "limit_version__set_by")
    return list(rows.order_by("from_at", "pk"))


def _in_force(run: Run, at: datetime) -> list[LimitVersion]:
    """The newest version of each limit of the run's taps that holds at a moment; one query."""
    of_run = Q(limit__experiment=run.experiment_id, limit__tap__in=run.run_taps.values("tap"))
    newest = LimitVersion.objects.filter(of_run, valid_from__lte=at).order_by("limit_id", "-number").distinct("limit_id")
    return [one for one in newest.select_related("limit__tap__station", "set_by") if not one.is_retired]


def _runs_relying_on(limit: Limit, from_at: datetime, until_at: datetime) -> list[Run]:
    """Runs of the limit's experiment that rely on its tap and touch the closed span."""
    found = declared_runs().filter(experiment=limit.experiment_id, run_taps__tap=limit.tap_id)
    return list(found.filter(starts_at__lte=until_at, over__gt=from_at))
