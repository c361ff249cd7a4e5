"""Planned runs looked at again as their start nears; whose word falls before the start calls the run's owner, once a fall."""

import logging
import time
from datetime import datetime, timedelta
from typing import Final

from django.conf import settings
from django.db import transaction
from django.utils import timezone

from analysis.outlook.verdict import Verdict
from ingest.store.read import DamagedStore
from labmon.clearance.ask import Answer
from labmon.clearance.models import RunClearance, RunWatch
from labmon.clearance.of_run import run_clearance
from labmon.clearance.words import reasons, remedies, sentence
from labmon.errors import WriteError
from labmon.live.publish import publish
from labmon.people.models import Person, Role
from labmon.runs.models import Run
from labmon.tell.models import MessageKind
from labmon.tell.outbox import Telling, queue

log = logging.getLogger(__name__)

#: Runs that start within this are looked at.
AHEAD: Final = timedelta(hours=24)
#: (time left to the start, least time between looks), the nearest first.
PACE: Final = (
    (timedelta(hours=1), timedelta(minutes=5)), (timedelta(hours=6), timedelta(minutes=15)), (AHEAD, timedelta(hours=1)))
#: Worst first. A fall is a step towards the front.
RANKS: Final = (Verdict.NOT_CLEARED, Verdict.NOT_ENOUGH, Verdict.THIN, Verdict.CLEARED)


def look_at_runs(now: datetime | None = None, *, for_s: float = float("inf")) -> int:
    """Look at the runs whose time for it has come, the next to start first; returns how many."""
    clock, began, looked = now or timezone.now(), time.monotonic(), 0
    soon = Run.objects.filter(cancelled_at=None, ended_at=None, starts_at__gt=clock, starts_at__lte=clock + AHEAD)
    for run_id, starts_at, looked_at in soon.order_by("starts_at", "pk").values_list(
            "pk", "starts_at", "clearance_watch__looked_at"):
        if time.monotonic() - began >= for_s:
            break
        if looked_at is None or clock - looked_at >= _least_between(starts_at - clock):
            looked += look_at_run(run_id, clock)
    return looked


def _least_between(left: timedelta) -> timedelta:
    return next((between for ahead, between in PACE if left <= ahead), PACE[-1][1])


@transaction.atomic
def look_at_run(run_id: int, now: datetime) -> bool:
    """Clear one run anew and keep what changed; False where somebody else does it, or it has begun."""
    run = (Run.objects.select_for_update(of=("self",), skip_locked=True)
           .select_related("experiment__owner", "owner", "deputy").filter(pk=run_id, cancelled_at=None).first())
    if run is None or run.starts_at <= now:
        return False
    try:
        answer = run_clearance(run, now)
    except (DamagedStore, WriteError) as fault:
        log.warning("run_not_cleared", extra={"run_id": run_id, "fault": str(fault)})
        return False
    verdict = answer.together.verdict if answer.together else Verdict.NOT_ENOUGH
    watch = RunWatch.objects.filter(run=run).first()
    standing = Verdict(watch.standing) if watch else None
    is_fall = standing is not None and RANKS.index(verdict) < RANKS.index(standing)
    newest = _kept(run, answer, verdict, now, is_fall=is_fall)
    falls = (watch.falls if watch else 0) + is_fall
    RunWatch.objects.update_or_create(run=run, defaults=_standing(watch, verdict, is_fall=is_fall) | {
        "looked_at": now, "falls": falls})
    if is_fall:
        _call(run, answer, standing, falls)
    if newest is not None:
        publish({"kind": "runs", "ids": [run.pk], "experiments": [run.experiment_id]})
    return True


def _standing(watch: RunWatch | None, verdict: Verdict, *, is_fall: bool) -> dict[str, str]:
    """The word that stands: a fall at once, a rise when it was seen twice in a row (one noisy minute calls nobody twice)."""
    if watch is None or is_fall or verdict == watch.standing:
        return {"standing": verdict.value, "better": ""}
    is_seen_again = bool(watch.better) and RANKS.index(Verdict(watch.better)) <= RANKS.index(verdict)
    return ({"standing": watch.better, "better": verdict.value if verdict != watch.better else ""} if is_seen_again
            else {"standing": watch.standing, "better": verdict.value})


def _kept(run: Run, answer: Answer, verdict: Verdict, now: datetime, *, is_fall: bool) -> RunClearance | None:
    """A row where something changed since the last one."""
    together = answer.together
    facts = {"verdict": verdict.value, "held": together.held if together else 0, "count": together.count if together else 0,
             "sentence": sentence(answer)[:500]}
    last = RunClearance.objects.filter(run=run).order_by("-made_at", "-pk").first()
    if last is not None and not is_fall and all(getattr(last, name) == value for name, value in facts.items()):
        return None
    return RunClearance.objects.create(run=run, made_at=now, failure_bound=together.failure_bound if together else 1.0,
                                       reasons=reasons(answer), is_fall=is_fall, **facts)


def _call(run: Run, answer: Answer, standing: Verdict | None, number: int) -> None:
    """Tell the run's owner, else the deputy, the experiment's owner, the managers; one message a fall."""
    told = _reachable(run) or [None]
    before = standing.value if standing else ""
    lines = [sentence(answer), "", f"Before, it was: {before}.", f"Run: {run.name}, {run.experiment.name}",
             f"Starts: {run.starts_at:%Y-%m-%d %H:%M} UTC", "", *reasons(answer), "", *remedies(answer), "",
             f"The run: {settings.PUBLIC_URL}/runs/{run.pk}/", "", "labmon watches and advises; it changes nothing on the bench."]
    queue(Telling(key=f"clearance-{run.pk}-{number}-{person.pk if person else 'lab'}", kind=MessageKind.CALL, person=person,
                  subject=f"Clearance fell before {run.name}: {sentence(answer)}", body="\n".join(lines), level="warning",
                  duty="run owner" if person is not None and person.pk == run.owner_id else "", path=f"/runs/{run.pk}/")
          for person in told)
    log.info("run_clearance_fell", extra={"run_id": run.pk, "before": before, "number": number})


def _reachable(run: Run) -> list[Person]:
    for person in (run.owner, run.deputy, run.experiment.owner):
        if person is not None and person.is_active and person.email:
            return [person]
    return list(Person.objects.filter(role=Role.MANAGER, is_active=True).exclude(email="").order_by("pk"))
