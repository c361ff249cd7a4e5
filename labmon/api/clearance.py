"""Will it hold? The answer of the stored past, for an experiment and for a declared run."""

import math
from datetime import datetime
from typing import Any

from django.http import HttpRequest, HttpResponse, QueryDict
from django.utils import timezone

from ingest.times import us_of
from labmon.api.answer import json_answer
from labmon.api.named import experiment_named, one_named
from labmon.api.problem import wrong_field
from labmon.api.query import known_only, time_or_none
from labmon.api.times import rfc3339
from labmon.clearance.ask import Answer, LimitAnswer, checked_question, clearance_of
from labmon.clearance.checklist import Point, checklist
from labmon.clearance.of_run import run_clearance
from labmon.clearance.words import reasons, remedies, sentence
from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.runs.queries import runs_visible_to

USUAL_LENGTH_S = 43_200.0


def get_clearance(request: HttpRequest, person: Person, experiment_id: int) -> HttpResponse:
    """Could a run start (now, or at ``start``)? Writes nothing."""
    known_only(request.GET, "start", "length_s", "allowed_s")
    experiment, now = experiment_named(person, experiment_id), timezone.now()
    start = time_or_none(request.GET, "start") or now
    length_s = _number(request.GET, "length_s", USUAL_LENGTH_S)
    allowed_s = _number(request.GET, "allowed_s", 0.0)
    question = checked_question(us_of(start), length_s, allowed_s, us_of(now))
    return json_answer(clearance_facts(experiment, clearance_of(experiment, question), now))


def get_run_clearance(request: HttpRequest, person: Person, run_id: int) -> HttpResponse:
    """The clearance of a run; of one that has begun, what would have been said at its start."""
    known_only(request.GET)
    run = one_named(runs_visible_to(person).select_related("experiment"), "There is no such run for you.",
                    "GET /api/v1/runs lists those that you may see.", pk=run_id)
    now = timezone.now()
    return json_answer({"run": run.pk} | clearance_facts(run.experiment, run_clearance(run, now), now))


def _number(query: QueryDict, name: str, usual: float) -> float:
    text = query.get(name)
    if not text:
        return usual
    try:
        return float(text)
    except ValueError:
        raise wrong_field(name, f"{text[:60]!r} is no number.", f"Give {name} in seconds, such as {usual:g}.") from None


def clearance_facts(experiment: Experiment, answer: Answer, now: datetime) -> dict[str, Any]:
    """An answer as the API names it. Times to the limit are null where that was not reached within the run."""
    question, together = answer.question, answer.together
    taps = list(experiment.taps.select_related("station", "heard").order_by("station__name", "name"))
    return {
        "experiment": experiment.pk, "start": rfc3339(question.start_us), "length_s": question.length_s,
        "allowed_s": question.allowed_s, "asked_at": rfc3339(question.asked_us), "known_until": rfc3339(question.known_until_us),
        "sentence": sentence(answer).replace("\N{NO-BREAK SPACE}", " "),
        "verdict": together.verdict.value if together else "not enough evidence", "reasons": reasons(answer),
        "reason_codes": [reason.name.lower() for reason in together.reasons] if together else ["no_limit"],
        "remedies": remedies(answer), "held": together.held if together else 0, "count": together.count if together else 0,
        "share": together.share if together else None, "failure_bound": together.failure_bound if together else 1.0,
        "level": 0.95, "median_s": together.median_s if together else None, "tenth_s": together.tenth_s if together else None,
        "open_causes": list(answer.open_causes), "limits": [_limit_facts(one) for one in answer.limits],
        "checklist": [_point_facts(point) for point in checklist(taps, answer.open_causes, now)],
    }


def _limit_facts(limit: LimitAnswer) -> dict[str, Any]:
    said, start = limit.clearance, limit.start
    return {
        "tap": limit.asked.tap_name, "quantity": limit.asked.quantity.value, "alarm": limit.asked.alarm,
        "limit_deg": _degrees(limit.asked.limit_rad), "angle_now_deg": _degrees(limit.now_rad),
        "is_trusted_now": start.is_trusted, "why_not_trusted": list(start.why_not), "newest_at": rfc3339(start.at_us),
        "verdict": said.verdict.value, "held": said.held, "count": said.count, "failure_bound": said.failure_bound,
        "median_s": said.median_s, "tenth_s": said.tenth_s, "trusted_share": said.trusted_share,
        "doubtful_share": limit.doubtful_share, "changed_at": rfc3339(limit.changed_at_us),
        "widened": [step.value for step in said.widened],
        "counted": [rfc3339(start_us) for start_us in said.counted],
        "failed": [{"start": rfc3339(one.start_us), "crossed_at": rfc3339(one.crossed_at_us),
                    "failed_at": rfc3339(one.failed_at_us), "beyond_s": one.beyond_s,
                    "worst_deg": _degrees(one.worst_rad), "known": list(one.labels)}
                   for one in said.failed],
        "set_aside": [{"start": rfc3339(start_us), "why": why.value} for start_us, why in said.set_aside],
    }


def _point_facts(point: Point) -> dict[str, Any]:
    return {"what": point.what, "about": point.about, "standing": point.standing.value, "said": point.said, "do": point.do}


def _degrees(angle_rad: float) -> float:
    return math.degrees(angle_rad)
