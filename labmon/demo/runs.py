"""Three runs of the invented lab: last night's with its ledger, one that lasts, one of tonight."""

from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Final

from labmon.demo.benches import RESEARCHER, STUDENT, bench_named
from labmon.demo.station import Say
from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.runs.actions import plan_run
from labmon.runs.ledgers import ask_due_ledgers
from labmon.runs.making import make_waiting_ledgers
from labmon.runs.models import Run
from labmon.runs.starting import start_due_runs

#: Planned so long before it began, as its people would have: the demo writes its past at once.
PLANNED_AHEAD: Final = timedelta(hours=5)


@dataclass(frozen=True, slots=True, kw_only=True)
class RunPlan:
    """A run of a bench's experiment; times from the evening (20:00 UTC) before the demo was built."""

    bench: str
    name: str
    owner: str
    deputy: str
    after_evening: timedelta
    length: timedelta
    allowed_below_s: float = 0.0


RUNS: Final = (
    RunPlan(bench="N2", name="EOM bias overnight", owner=STUDENT, deputy=RESEARCHER, after_evening=timedelta(),
            length=timedelta(hours=3), allowed_below_s=60.0),
    RunPlan(bench="V2", name="coupler ageing, 96 h", owner=RESEARCHER, deputy=STUDENT, after_evening=timedelta(hours=-2),
            length=timedelta(hours=96)),
    RunPlan(bench="S1", name="trap lifetime", owner=RESEARCHER, deputy=STUDENT, after_evening=timedelta(hours=24),
            length=timedelta(hours=12)),
)


def evening_before(now: datetime) -> datetime:
    """20:00 UTC of the last evening that is at least four hours ago."""
    evening = now.replace(hour=20, minute=0, second=0, microsecond=0)
    while evening > now - timedelta(hours=4):
        evening -= timedelta(days=1)
    return evening


def declare_runs(now: datetime, say: Say) -> None:
    """Plan the runs, start what has begun and make the ledger of the one that is over; done once it changes nothing."""
    if Run.objects.exists():
        return
    evening = evening_before(now)
    for plan in RUNS:
        experiment = Experiment.objects.get(name=bench_named(plan.bench).experiment)
        owner, deputy = (Person.objects.get(username=name) for name in (plan.owner, plan.deputy))
        starts_at = evening + plan.after_evening
        run = plan_run(experiment, by=owner, name=plan.name, starts_at=starts_at, ends_at=starts_at + plan.length, owner=owner,
                       deputy=deputy, allowed_below_s=plan.allowed_below_s)
        Run.objects.filter(pk=run.pk).update(planned_at=min(starts_at - PLANNED_AHEAD, now))
    start_due_runs(now)
    ask_due_ledgers(now)
    made = make_waiting_ledgers()
    say(f"{len(RUNS)} runs declared, {len(made)} of them over, with its ledger")
