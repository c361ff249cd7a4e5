"""Back-tests and the word of runs, as pages and the API need them; a fixed number of queries."""

from dataclasses import dataclass
from datetime import datetime
from typing import Any

from django.db.models import Count

from labmon.clearance.models import BackTestPass, LimitBackTest, RunClearance
from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.people.rights import experiments_visible_to
from labmon.runs.models import Run


@dataclass(frozen=True, slots=True)
class Progress:
    """A pass that is under way."""

    done: int
    total: int


@dataclass(frozen=True, slots=True, kw_only=True)
class KeptBackTest:
    """A limit's newest back-test; ``nights`` is empty where it was not asked for."""

    limit_id: int
    experiment_id: int
    experiment: str
    tap_name: str
    quantity: str
    alarm: float
    made_at: datetime
    facts: dict[str, Any]
    nights: list[Any]

    @property
    def bench(self) -> str:
        """The experiment with its tap."""
        return f"{self.experiment}, {self.tap_name}"


def kept_back_tests(
    person: Person, *, experiment: Experiment | None = None, with_nights: bool | None = None
) -> list[KeptBackTest]:
    """Back-tests of the experiments that ``person`` may see (or of one), by name; of limits that are in force.

    Args:
        with_nights: Read every night too; None: only for who does not see the whole lab.
    """
    visible = experiments_visible_to(person)
    rows = LimitBackTest.objects.filter(limit__experiment__in=visible if experiment is None else [experiment])
    rows = rows.select_related("limit__experiment", "limit__tap__station").order_by(
        "limit__experiment__name", "limit__tap__station__name", "limit__tap__name", "limit__quantity")
    is_read = person.role == "guest" if with_nights is None else with_nights
    return [KeptBackTest(
        limit_id=row.limit_id, experiment_id=row.limit.experiment_id, experiment=row.limit.experiment.name,
        tap_name=f"{row.limit.tap.station.name}/{row.limit.tap.name}", quantity=row.limit.quantity, alarm=row.alarm,
        made_at=row.made_at, facts=row.facts, nights=row.nights if is_read else [])
        for row in (rows if is_read else rows.defer("nights"))]


def newest_pass() -> BackTestPass | None:
    """The last pass that has ended."""
    return BackTestPass.objects.filter(ended_at__isnull=False).order_by("-ended_at").first()


def progress_now() -> Progress | None:
    """How far the pass under way is; None where there is none."""
    open_one = BackTestPass.objects.filter(ended_at=None).annotate(left=Count("due")).first()
    return None if open_one is None else Progress(open_one.total - open_one.left, open_one.total)


def run_words(run: Run) -> list[RunClearance]:
    """What was said of a run before its start, newest first."""
    return list(RunClearance.objects.filter(run=run).order_by("-made_at", "-pk")[:100])
