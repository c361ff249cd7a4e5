"""The only writer of runs. Each write leaves its audit row and tells the pages after the commit."""

from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from datetime import datetime
from typing import Any

from django.db import IntegrityError, transaction
from django.utils import timezone

from ingest.models import Tap
from labmon.audit.actions import note
from labmon.errors import WriteError
from labmon.experiments.models import Experiment
from labmon.live.publish import publish
from labmon.people.models import Person
from labmon.runs import wishes
from labmon.runs.models import ONE_RUN_AT_ONCE, Run, RunTap
from labmon.runs.queries import declared_runs

_UNCHANGED: Any = object()


@transaction.atomic
def plan_run(
    experiment: Experiment,
    *,
    by: Person | None,
    name: str,
    starts_at: datetime,
    ends_at: datetime,
    taps: Iterable[Tap] | None = None,
    owner: Person | None = None,
    deputy: Person | None = None,
    allowed_below_s: float = 0.0,
    wanted_trusted_share: float = 0.95,
) -> Run:
    """Declare a run of ``experiment`` on ``taps`` (left out: all that it watches), owned by ``owner`` or who plans it.

    A start in the past declares a run that is under way, or over: the page and the ledger say when it was declared.
    Raises:
        WriteError: A field cannot be meant, or another run of the experiment takes the time; it is named.
    """
    Experiment.objects.select_for_update().get(pk=experiment.pk)
    chosen = wishes.checked_taps(experiment, taps)
    run = Run(
        experiment=experiment,
        name=wishes.checked_name(name),
        owner=wishes.checked_person("owner", owner or by),
        deputy=wishes.checked_person("deputy", deputy),
        planned_by=by,
        starts_at=wishes.in_utc("starts_at", starts_at),
        ends_at=wishes.in_utc("ends_at", ends_at),
        allowed_below_s=wishes.checked_allowed(allowed_below_s),
        wanted_trusted_share=wishes.checked_share(wanted_trusted_share),
    )
    wishes.check_times(run)
    _check_free(run)
    with _named_overlap(run):
        run.save()
    RunTap.objects.bulk_create([RunTap(run=run, tap=tap) for tap in chosen])
    note(by, "plan run", run, after=run_facts(run))
    _tell(run)
    return run


@transaction.atomic
def change_run(
    run: Run,
    *,
    by: Person | None,
    name: str = _UNCHANGED,
    starts_at: datetime = _UNCHANGED,
    ends_at: datetime = _UNCHANGED,
    taps: Iterable[Tap] = _UNCHANGED,
    owner: Person | None = _UNCHANGED,
    deputy: Person | None = _UNCHANGED,
    allowed_below_s: float = _UNCHANGED,
    wanted_trusted_share: float = _UNCHANGED,
    reason: str = "",
) -> Run:
    """Change what is given: before the start all of it; while it lasts only name, people and end; after it nothing.

    Raises:
        WriteError: A field cannot be meant or can no longer be changed, or another run takes the time.
    """
    locked = _locked(run)
    before = run_facts(locked)
    starts_at = starts_at if starts_at is _UNCHANGED else wishes.in_utc("starts_at", starts_at)
    ends_at = ends_at if ends_at is _UNCHANGED else wishes.in_utc("ends_at", ends_at)
    taps = taps if taps is _UNCHANGED else list(taps)
    given = {
        "starts_at": (starts_at, locked.starts_at),
        "allowed_below_s": (allowed_below_s, locked.allowed_below_s),
        "wanted_trusted_share": (wanted_trusted_share, locked.wanted_trusted_share),
        "taps": (taps if taps is _UNCHANGED else {tap.pk for tap in taps}, set(locked.run_taps.values_list("tap_id", flat=True))),
    }
    wishes.check_still_open(locked, {field for field, (new, old) in given.items() if new is not _UNCHANGED and new != old})
    if name is not _UNCHANGED:
        locked.name = wishes.checked_name(name)
    if owner is not _UNCHANGED:
        locked.owner = wishes.checked_person("owner", owner)
    if deputy is not _UNCHANGED:
        locked.deputy = wishes.checked_person("deputy", deputy)
    if allowed_below_s is not _UNCHANGED:
        locked.allowed_below_s = wishes.checked_allowed(allowed_below_s)
    if wanted_trusted_share is not _UNCHANGED:
        locked.wanted_trusted_share = wishes.checked_share(wanted_trusted_share)
    _move(locked, starts_at, ends_at)
    with _named_overlap(locked):
        locked.save()
    if taps is not _UNCHANGED:
        _set_taps(locked, taps)
    note(by, "change run", locked, before, run_facts(locked), reason)
    _tell(locked)
    return locked


@transaction.atomic
def stop_run(run: Run, *, by: Person | None, reason: str = "") -> Run:
    """End a run that is under way, at the present whole second; its ledger covers what was.

    Raises:
        WriteError: It is not under way.
    """
    locked = _locked(run)
    now = timezone.now().replace(microsecond=0)
    if locked.cancelled_at or not locked.starts_at < now < locked.over_at:
        raise WriteError("run", f"{locked.name} is not under way.", "Cancel a run that has not begun; one that is over stays.")
    before = run_facts(locked)
    locked.ended_at, locked.ended_by, locked.end_reason = now, by, wishes.checked_reason(reason)
    locked.save(update_fields=["ended_at", "ended_by", "end_reason"])
    note(by, "stop run", locked, before, run_facts(locked), reason)
    _tell(locked)
    return locked


@transaction.atomic
def cancel_run(run: Run, *, by: Person | None, reason: str = "") -> Run:
    """Take back a run that has not begun; the row stays, the time is free again.

    Raises:
        WriteError: It has begun, or was cancelled before.
    """
    locked = _locked(run)
    if locked.cancelled_at:
        raise WriteError("run", f"{locked.name} was cancelled before.", "Plan it anew if it is wanted.")
    if locked.starts_at <= timezone.now():
        raise WriteError("run", f"{locked.name} has begun.", "Stop it: its ledger then covers what was.")
    before = run_facts(locked)
    locked.cancelled_at, locked.cancelled_by, locked.cancel_reason = timezone.now(), by, wishes.checked_reason(reason)
    locked.save(update_fields=["cancelled_at", "cancelled_by", "cancel_reason"])
    note(by, "cancel run", locked, before, run_facts(locked), reason)
    _tell(locked)
    return locked


def run_facts(run: Run) -> dict[str, Any]:
    """A run as the audit keeps it."""
    taps = run.taps.values_list("station__name", "name") if run.pk else []
    return {
        "experiment": run.experiment.name,
        "name": run.name,
        "owner": run.owner.username if run.owner else None,
        "deputy": run.deputy.username if run.deputy else None,
        "starts_at": run.starts_at,
        "ends_at": run.ends_at,
        "ended_at": run.ended_at,
        "cancelled_at": run.cancelled_at,
        "taps": sorted(f"{station}/{tap}" for station, tap in taps),
        "allowed_below_s": run.allowed_below_s,
        "wanted_trusted_share": run.wanted_trusted_share,
    }


def _locked(run: Run) -> Run:
    """The run as it is now, its experiment and itself locked: planning and changing take turns."""
    Experiment.objects.select_for_update().get(pk=run.experiment_id)
    return Run.objects.select_for_update(of=("self",)).select_related("experiment", "owner", "deputy").get(pk=run.pk)


def _move(run: Run, starts_at: datetime, ends_at: datetime) -> None:
    if ends_at is not _UNCHANGED and ends_at != run.ends_at and ends_at <= timezone.now():
        raise WriteError("ends_at", "It lies in the past.", "Stop the run instead: that ends it now.")
    if starts_at is not _UNCHANGED:
        run.starts_at = starts_at
    if ends_at is not _UNCHANGED:
        run.ends_at = ends_at
    wishes.check_times(run)
    _check_free(run)


def _set_taps(run: Run, taps: Iterable[Tap]) -> None:
    chosen = wishes.checked_taps(run.experiment, taps)
    run.run_taps.exclude(tap__in=chosen).delete()
    RunTap.objects.bulk_create([RunTap(run=run, tap=tap) for tap in chosen], ignore_conflicts=True)


def _check_free(run: Run) -> None:
    """Raises WriteError, naming the run that takes the time."""
    others = declared_runs().filter(experiment_id=run.experiment_id, starts_at__lt=run.over_at, over__gt=run.starts_at)
    other = others.exclude(pk=run.pk).order_by("starts_at").first()
    if other is not None:
        raise WriteError(
            "starts_at",
            f"The run “{other.name}” takes {run.experiment.name} from {wishes.minute(other.starts_at)} to "
            f"{wishes.minute(other.over_at)}.",
            "Choose another time, or stop or cancel that run first.",
        )


@contextmanager
def _named_overlap(run: Run) -> Iterator[None]:
    """The database's own refusal as a sentence, should a writer ever come past `_check_free`."""
    try:
        with transaction.atomic():
            yield
    except IntegrityError as fault:
        if ONE_RUN_AT_ONCE in str(fault):
            _check_free(run)
        raise


def _tell(run: Run) -> None:
    publish({"kind": "runs", "ids": [run.pk], "experiments": [run.experiment_id]})
