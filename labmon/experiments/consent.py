"""A limit loosened during a declared run: one person asks, a second one consents; both are in the audit.

Whoever may set the limit may consent, except the one who asks. What nobody decides expires with the run.
"""

from dataclasses import asdict
from datetime import datetime
from typing import Any

from django.conf import settings
from django.db import transaction
from django.db.models import Q, QuerySet
from django.utils import timezone

from ingest.models import Tap
from labmon.audit.actions import note as audit_note
from labmon.claims import JUDGING, lock_tap
from labmon.errors import NotAllowed, WriteError
from labmon.experiments.actions import add_version, loosened, version_facts
from labmon.experiments.floors import check_floor
from labmon.experiments.models import Experiment, Limit, LimitRequest, LimitVersion, RequestState
from labmon.experiments.rules import LimitWish, checked_quantity, checked_wish
from labmon.live.publish import publish
from labmon.people.models import Person, Role
from labmon.runs.queries import run_now
from labmon.tell.outbox import Telling, queue


@transaction.atomic
def ask_to_loosen(experiment: Experiment, tap: Tap, quantity: str, wish: LimitWish | None, *, by: Person,
                  reason: str) -> LimitRequest:
    """Ask a second person for a looser limit (None: none at all) while a run is under way.

    Raises:
        WriteError: Nobody's consent is needed, somebody has asked already, no reason is given, or the limit cannot be meant.
    """
    named = checked_quantity(quantity, tap)
    if not reason.strip():
        raise WriteError("reason", "Whoever is to consent must know why.", "Say why.")
    run, now = run_now(experiment), timezone.now()
    if run is None:
        raise WriteError("alarm", f"No run of {experiment.name} is under way.", "Set the limit: nobody's consent is needed.")
    lock_tap(JUDGING, tap.pk)
    limit = Limit.objects.filter(experiment=experiment, tap=tap, quantity=named.value).first()
    last = _last(limit)
    if last is None or last.is_retired:
        raise WriteError("alarm", "There is no such limit in force.", "Set it: that only tightens.")
    if wish is not None:
        rule = checked_wish(named, wish)
        check_floor(tap, rule)
        parts = loosened(last, rule, in_runs_only=wish.in_runs_only)
        if not parts:
            raise WriteError("alarm", "This only tightens the limit.", "Set it: nobody's consent is needed.")
    else:
        parts = ("is_retired",)
    expire_requests(now)
    if waiting_requests().filter(experiment=experiment, tap=tap, quantity=named.value).exists():
        raise WriteError("alarm", "A request for this limit waits already.", "Let it be decided or withdrawn first.")
    made = LimitRequest.objects.create(
        experiment=experiment, tap=tap, quantity=named.value, wish=None if wish is None else asdict(wish), version=last,
        loosens=list(parts), asked_by=by, asked_at=now, reason=reason.strip()[:500], expires_at=run.over_at,
    )
    audit_note(by, "ask to loosen limit", last.limit, version_facts(last), made.wish or {"is_retired": True}, made.reason)
    _tell(made)
    return made


@transaction.atomic
def decide_request(request_id: int, *, by: Person, is_granted: bool, note: str = "") -> LimitRequest:
    """Consent to a request, or refuse it; consent puts the limit in force at once.

    Raises:
        NotAllowed: Nobody consents to their own request.
        WriteError: It is decided, withdrawn or expired, or the limit has changed since it was asked for.
    """
    request = _waiting(request_id)
    if request.asked_by_id == by.pk:
        raise NotAllowed("A second person must decide; you may withdraw what you asked for.")
    lock_tap(JUDGING, request.tap_id)
    if is_granted:
        if _last(request.version.limit) != request.version:
            raise WriteError("request", "The limit was changed since this was asked for.", "Refuse it, and let it be asked anew.")
        _put_in_force(request, by)
    _close(request, RequestState.GRANTED if is_granted else RequestState.REFUSED, by, note)
    audit_note(by, "consent to looser limit" if is_granted else "refuse looser limit", request.version.limit,
               version_facts(request.version), request.wish or {"is_retired": True}, request.note)
    return request


@transaction.atomic
def withdraw_request(request_id: int, *, by: Person) -> LimitRequest:
    """Take back what one has asked for.

    Raises:
        NotAllowed: Somebody else asked.
    """
    request = _waiting(request_id)
    if request.asked_by_id != by.pk:
        raise NotAllowed("Only who asked may withdraw; you may refuse it.")
    _close(request, RequestState.WITHDRAWN, by, "")
    audit_note(by, "withdraw request for looser limit", request.version.limit, reason=request.reason)
    return request


@transaction.atomic
def expire_requests(now: datetime | None = None) -> int:
    """Close what nobody decided in time; returns how many."""
    due = list(LimitRequest.objects.select_for_update(skip_locked=True, of=("self",)).select_related("version__limit")
               .filter(state=RequestState.WAITING, expires_at__lte=now or timezone.now()).order_by("pk"))
    for request in due:
        _close(request, RequestState.EXPIRED, None, "")
        audit_note(None, "request for looser limit expired", request.version.limit, reason=request.reason, as_name="labmon")
    return len(due)


def waiting_requests() -> QuerySet[LimitRequest]:
    """Requests that wait for a second person."""
    return LimitRequest.objects.filter(state=RequestState.WAITING, expires_at__gt=timezone.now())


def requests_of(experiment: Experiment, *, most: int = 10) -> list[LimitRequest]:
    """The newest requests of an experiment, newest first."""
    rows = LimitRequest.objects.filter(experiment=experiment).order_by("-asked_at", "-pk")
    return list(rows.select_related("tap__station", "asked_by", "decided_by", "version__limit")[:most])


def _put_in_force(request: LimitRequest, by: Person) -> None:
    last, limit = request.version, request.version.limit
    if request.wish is None:
        values: dict[str, Any] = _values(last) | {"is_retired": True}
    else:
        wish = LimitWish(**request.wish)
        rule = checked_wish(checked_quantity(request.quantity, request.tap), wish)
        check_floor(request.tap, rule)
        values = _values(rule) | {"in_runs_only": wish.in_runs_only}
    add_version(limit, None, by=request.asked_by, reason=request.reason, consented_by=by, **values)


def _values(source: Any) -> dict[str, Any]:
    names = ["alarm", "warning", "on_delay_s", "off_delay_s", "deadband", "window_s"]
    names += ["in_runs_only"] if isinstance(source, LimitVersion) else []
    return {name: getattr(source, name) for name in names}


def _last(limit: Limit | None) -> LimitVersion | None:
    return None if limit is None else limit.versions.select_related("limit").order_by("-number").first()


def _waiting(request_id: int) -> LimitRequest:
    request = (LimitRequest.objects.select_for_update(of=("self",))
               .select_related("version__limit", "tap__station", "asked_by", "experiment").get(pk=request_id))
    if request.state != RequestState.WAITING or request.expires_at <= timezone.now():
        word = "expired" if request.state == RequestState.WAITING else request.state
        raise WriteError("request", f"This request is {word}.", "Ask anew if the limit is still wanted.")
    return request


def _close(request: LimitRequest, state: RequestState, by: Person | None, note: str) -> None:
    request.state, request.decided_by, request.decided_at = state, by, timezone.now()
    request.note = note.replace("\0", "").strip()[:500]
    request.save(update_fields=["state", "decided_by", "decided_at", "note"])
    publish({"kind": "limits", "ids": [request.version.limit_id], "experiments": [request.experiment_id]})


def _tell(request: LimitRequest) -> None:
    """Those who may consent are told: the experiment's owner and the managers, the one who asks left out."""
    may_consent = Q(role=Role.MANAGER) | Q(is_superuser=True) | Q(pk=request.experiment.owner_id)
    path = f"/experiments/{request.experiment_id}/"
    body = (f"{request.asked_by.username} asks to loosen a limit of {request.experiment.name} while a run is under way: "
            f"“{request.reason}”.\n\nA second person must consent: {settings.PUBLIC_URL}{path}\n"
            f"Without a decision it expires at {request.expires_at:%Y-%m-%d %H:%M} UTC.\n")
    queue([Telling(key=f"limit-request-{request.pk}-{person.pk}", person=person, body=body, path=path,
                   subject=f"Consent asked for: a limit of {request.experiment.name}")
           for person in Person.objects.filter(may_consent, is_active=True).exclude(pk=request.asked_by_id).order_by("pk")])
    publish({"kind": "limits", "ids": [request.version.limit_id], "experiments": [request.experiment_id]})
