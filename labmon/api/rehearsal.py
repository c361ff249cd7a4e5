"""A proposed limit tried on the stored past."""

from django.http import HttpRequest, HttpResponse

from ingest.times import SECOND_US, at_of, now_us
from labmon.api.answer import json_answer
from labmon.api.body import body_of
from labmon.api.experiments import LimitBody
from labmon.api.named import experiment_named, tap_in_body
from labmon.api.problem import wrong_field
from labmon.api.query import known_only
from labmon.api.times import rfc3339
from labmon.experiments.rehearsal import LONGEST_US, present_hosts, rehearse_limit
from labmon.experiments.rules import LimitWish
from labmon.people.models import Person
from labmon.people.rights import Action, require

DAY_US = 86_400 * SECOND_US


class Proposal(LimitBody):
    """The body of POST …/limits/rehearse."""

    hard: float | None = None
    days: float = 30.0


def post_rehearse(request: HttpRequest, person: Person, experiment_id: int) -> HttpResponse:
    """What the limit would have raised in the last days; writes nothing."""
    known_only(request.GET)
    experiment = experiment_named(person, experiment_id)
    require(person, Action.READ, experiment)
    wish = body_of(request, Proposal)
    tap = tap_in_body(person, wish.tap, field="tap")
    limit = LimitWish(alarm=wish.alarm, warning=wish.warning, on_delay_s=wish.on_delay_s, off_delay_s=wish.off_delay_s,
                      deadband=wish.deadband, window_s=wish.window_s)
    clock_us = now_us()
    if not 0 < wish.days <= LONGEST_US / DAY_US:
        raise wrong_field("days", f"{wish.days:g} days cannot be replayed.", "Choose more than 0 and at most 31.")
    length_us = round(wish.days * DAY_US)
    found = rehearse_limit(tap, wish.quantity, limit, clock_us - length_us, clock_us, clock_us, hard=wish.hard,
                           hosts=present_hosts(experiment, tap))
    calls = [{"raised_at": rfc3339(at_of(call.raised_us)),
              "returned_at": None if call.returned_us is None else rfc3339(at_of(call.returned_us)),
              "alarm_at": None if call.alarm_us is None else rfc3339(at_of(call.alarm_us)), "lead_s": call.lead_s}
             for call in found.calls]
    return json_answer({"from": rfc3339(at_of(found.from_us)), "until": rfc3339(at_of(found.until_us)), "calls": calls,
                        "count": len(calls), "at_night": found.at_night, "longest_s": found.longest_s,
                        "open_s": found.open_s, "read_share": found.read_share})
