"""Someone leaves: what hangs on them is passed on first, then the account is closed; all or nothing."""

from collections.abc import Mapping

from django.db import transaction
from django.utils import timezone

from labmon.audit.actions import note
from labmon.benches.actions import set_bench_owner
from labmon.benches.models import Bench
from labmon.errors import WriteError
from labmon.events.models import OnCall
from labmon.experiments.actions import change_experiment
from labmon.experiments.consent import withdraw_request
from labmon.experiments.models import Experiment, LimitRequest, RequestState
from labmon.people.actions import end_access
from labmon.people.holdings import Holding, HoldingKind, holdings_of, may_take
from labmon.people.models import Person
from labmon.runs.actions import change_run
from labmon.runs.models import Run
from labmon.tell.models import PushDevice


@transaction.atomic
def leave(person: Person, to: Mapping[str, Person], *, by: Person | None, reason: str = "") -> Person:
    """Pass each holding to whom ``to`` names by its key, then end sessions, keys and devices at once.

    Raises:
        WriteError: Something would be nobody's, or someone cannot take it over; nothing is changed then.
    """
    Person.objects.select_for_update().get(pk=person.pk)
    held = holdings_of(person)
    _check(person, held, to)
    for one in held:
        _pass_on(one, to[one.key], by, f"{person.username} leaves. {reason}".strip()[:500])
    for request in LimitRequest.objects.filter(asked_by=person, state=RequestState.WAITING):
        withdraw_request(request.pk, by=person)
    PushDevice.objects.filter(person=person, ended_at=None).update(ended_at=timezone.now(), ended_why="their person left")
    return end_access(person, by=by, reason=reason)


def _check(person: Person, held: list[Holding], to: Mapping[str, Person]) -> None:
    missing = [one for one in held if one.key not in to]
    if missing:
        names = ", ".join(f"{one.kind} {one.name}" for one in missing[:8]) + (" …" if len(missing) > 8 else "")
        raise WriteError("to", f"Nobody would have: {names}.", "Choose for each who takes it over.")
    for one in held:
        if to[one.key].pk == person.pk or not may_take(to[one.key], one.kind):
            raise WriteError("to", f"{to[one.key].username} cannot take over {one.kind} {one.name}.",
                             "Choose someone else of the lab: for benches and experiments an owner or a manager.")


def _pass_on(one: Holding, to: Person, by: Person | None, reason: str) -> None:
    match one.kind:
        case HoldingKind.BENCH:
            set_bench_owner(Bench.objects.select_related("station").get(pk=one.number).station, to, by=by, reason=reason)
        case HoldingKind.EXPERIMENT:
            change_experiment(Experiment.objects.get(pk=one.number), by=by, owner=to, reason=reason)
        case HoldingKind.RUN:
            run = Run.objects.select_related("deputy").get(pk=one.number)
            change_run(run, by=by, owner=to, **({"deputy": None} if run.deputy_id == to.pk else {}), reason=reason)
        case HoldingKind.DEPUTY:
            run = Run.objects.get(pk=one.number)
            change_run(run, by=by, deputy=None if run.owner_id == to.pk else to, reason=reason)
        case HoldingKind.ON_CALL:
            duty = OnCall.objects.select_for_update(of=("self",)).select_related("person").get(pk=one.number)
            before, duty.person = duty.person.username, to
            duty.save(update_fields=["person"])
            note(by, "pass on duty", duty, {"person": before}, {"person": to.username, "from": duty.from_at,
                                                                "until": duty.until_at}, reason)
