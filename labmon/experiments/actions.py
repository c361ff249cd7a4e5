"""The only writer of experiments, limits and their versions. Each write leaves its audit row."""

import math
from collections.abc import Callable, Iterable
from datetime import datetime, timedelta
from typing import Any

from django.db import IntegrityError, transaction
from django.utils import timezone

from analysis.judge.loosened import loosened_parts
from analysis.judge.rule import LimitRule, Quantity
from ingest.models import Tap, TapHeard, Touch
from ingest.times import us_of
from labmon.audit.actions import note
from labmon.claims import JUDGING, lock_tap
from labmon.errors import SecondPersonNeeded, WriteError
from labmon.experiments.floors import check_floor, floors_of
from labmon.experiments.models import Experiment, Limit, LimitVersion
from labmon.experiments.rules import LimitWish, checked_quantity, checked_wish, rule_of
from labmon.live.publish import publish
from labmon.people.models import Person, Role
from labmon.people.rights import role_of
from labmon.runs.limits import check_not_into_a_run, note_in_runs
from labmon.runs.queries import runs_between

#: A tap's first limit also looks at the day before it was set: an excursion that is under way is then seen as what it is.
FIRST_LIMIT_LOOKS_BACK = timedelta(days=1)
RUN_TOWARDS = (Quantity.ER_DB, Quantity.ANGLE_DEG)
_UNCHANGED: Any = object()


@transaction.atomic
def create_experiment(
    name: str,
    taps: Iterable[Tap],
    *,
    by: Person | None,
    owner: Person | None = None,
    no_reading_after_s: float | None = None,
    untrusted_after_s: float = 60.0,
) -> Experiment:
    """An experiment that watches ``taps``; without ``owner`` it belongs to who makes it."""
    experiment = Experiment(
        name=_checked_name(name),
        owner=owner or by,
        no_reading_after_s=_checked_wait("no_reading_after_s", no_reading_after_s),
        untrusted_after_s=_checked_wait("untrusted_after_s", untrusted_after_s),
    )
    _save_once(experiment)
    experiment.taps.set(taps)
    note(by, "create experiment", experiment, after=_facts(experiment))
    publish({"kind": "experiments", "ids": [experiment.pk]})
    return experiment


@transaction.atomic
def change_experiment(
    experiment: Experiment,
    *,
    by: Person | None,
    name: str = _UNCHANGED,
    taps: Iterable[Tap] = _UNCHANGED,
    owner: Person | None = _UNCHANGED,
    no_reading_after_s: float | None = _UNCHANGED,
    untrusted_after_s: float = _UNCHANGED,
    reason: str = "",
) -> Experiment:
    """Change what is given. A tap can leave only when its limits here are retired."""
    locked = Experiment.objects.select_for_update(of=("self",)).get(pk=experiment.pk)
    before = _facts(locked)
    if name is not _UNCHANGED:
        locked.name = _checked_name(name)
    if owner is not _UNCHANGED:
        locked.owner = owner
    if no_reading_after_s is not _UNCHANGED:
        locked.no_reading_after_s = _checked_wait("no_reading_after_s", no_reading_after_s)
    if untrusted_after_s is not _UNCHANGED:
        locked.untrusted_after_s = _checked_wait("untrusted_after_s", untrusted_after_s)
    _save_once(locked)
    if taps is not _UNCHANGED:
        _set_taps(locked, list(taps))
    note(by, "change experiment", locked, before, _facts(locked), reason)
    publish({"kind": "experiments", "ids": [locked.pk]})
    return locked


def set_limit(
    experiment: Experiment,
    tap: Tap,
    quantity: str,
    *,
    alarm: float,
    warning: float | None = None,
    on_delay_s: float = 60.0,
    off_delay_s: float = 60.0,
    deadband: float | None = None,
    window_s: float | None = None,
    in_runs_only: bool = False,
    reason: str = "",
    valid_from: datetime | None = None,
    by: Person | None,
) -> LimitVersion:
    """A new version of a limit (or its first), in force from ``valid_from``.

    Left out, ``valid_from`` is now; for the first version a day earlier. The fold starts anew at that moment; an open
    alarm stays until the light is clear under the new limit.
    Raises:
        WriteError: A field cannot be meant, or asks for less than the lab's floor.
        SecondPersonNeeded: It loosens a limit while a run is under way; the attempt stands in the audit.
    """
    if not experiment.taps.filter(pk=tap.pk).exists():
        raise WriteError(
            "tap", f"{experiment.name} does not watch {tap.station.name}/{tap.name}.", "Add the tap to the experiment first."
        )
    named = checked_quantity(quantity, tap)
    wish = LimitWish(
        alarm=alarm, warning=warning, on_delay_s=on_delay_s, off_delay_s=off_delay_s, deadband=deadband, window_s=window_s,
        in_runs_only=in_runs_only,
    )
    rule = checked_wish(named, wish)
    check_floor(tap, rule)
    if named is Quantity.TIME_TO_LIMIT_S and not experiment.limits.filter(tap=tap, quantity__in=RUN_TOWARDS).exists():
        raise WriteError("quantity", "The tap has no limit on er_db or angle_deg here that the light could run towards.",
                         "Set that limit first.")
    values = {name: getattr(rule, name) for name in VALUES if name != "in_runs_only"} | {"in_runs_only": in_runs_only}

    def write() -> LimitVersion:
        lock_tap(JUDGING, tap.pk)
        limit, _ = Limit.objects.get_or_create(experiment=experiment, tap=tap, quantity=named.value)
        last = limit.versions.order_by("-number").first()
        if last is not None and not last.is_retired:
            _check_alone(limit, loosened(last, rule, in_runs_only=in_runs_only), valid_from, by)
        return add_version(limit, valid_from, by=by, reason=reason, **values)

    return _noting_refusals(write, by, values, reason)


def retire_limit(limit: Limit, *, by: Person | None, reason: str = "") -> LimitVersion:
    """End a limit now; its history stays, an open alarm returns.

    Raises:
        WriteError: It is not in force, or the lab's floor asks for it and ``by`` is no manager.
        SecondPersonNeeded: A run is under way; the attempt stands in the audit.
    """

    def write() -> LimitVersion:
        lock_tap(JUDGING, limit.tap_id)
        last = limit.versions.order_by("-number").first()
        if last is None or last.is_retired:
            raise WriteError("limit", "This limit is not in force.", "Set it anew if it is wanted.")
        is_bound = (limit.tap_id, limit.quantity) in floors_of([limit.tap])
        if is_bound and by is not None and role_of(by) is not Role.MANAGER:
            raise WriteError("limit", "The lab's floor asks for this limit.", "Only a lab manager may retire it.")
        _check_alone(limit, ("is_retired",), None, by)
        return add_version(limit, None, by=by, reason=reason, is_retired=True, **{name: getattr(last, name) for name in VALUES})

    return _noting_refusals(write, by, {"is_retired": True}, reason)


def loosened(last: LimitVersion, rule: LimitRule, *, in_runs_only: bool) -> tuple[str, ...]:
    """What a new rule would loosen of the version in force."""
    parts = loosened_parts(rule_of(last, rule.quantity), rule)
    return (*parts, "in_runs_only") if in_runs_only and not last.in_runs_only else parts


def _check_alone(limit: Limit, parts: tuple[str, ...], valid_from: datetime | None, by: Person | None) -> None:
    """Raises SecondPersonNeeded where one person may not do this alone: it loosens, and a run is (or was then) under way.

    Commands at the machine itself (``by`` None) ask nobody.
    """
    now = timezone.now()
    asks = bool(parts) and by is not None
    runs = runs_between(valid_from or now, now + timedelta(microseconds=1), [limit.experiment_id]) if asks else []
    if runs:
        words = ", ".join(PART_WORDS[part] for part in parts)
        raise SecondPersonNeeded(parts[0] if parts[0] in VALUES else "limit",
                                 f"The run “{runs[-1].name}” is under way: a limit may only be tightened ({words}).",
                                 parts, limit)


def _noting_refusals(write: Callable[[], LimitVersion], by: Person | None, after: dict[str, Any], reason: str) -> LimitVersion:
    """The write in its transaction; where a second person is needed the attempt is kept, and nothing else."""
    try:
        with transaction.atomic():
            return write()
    except SecondPersonNeeded as refusal:
        with transaction.atomic():
            note(by, "limit not loosened: second person needed", refusal.limit, after=after | {"looser": list(refusal.parts)},
                 reason=reason)
        raise


#: The parts of a version that say what is judged, and how they are called where they would be looser.
VALUES = ("alarm", "warning", "on_delay_s", "off_delay_s", "deadband", "window_s", "in_runs_only")
PART_WORDS = {
    "alarm": "the alarm level would be looser",
    "warning": "the warning would be looser or gone",
    "on_delay_s": "the on-delay would be longer",
    "off_delay_s": "the off-delay would be shorter",
    "deadband": "the deadband would be smaller",
    "window_s": "the window would be another",
    "in_runs_only": "it would call in runs only",
    "is_retired": "it would be gone",
}


def add_version(limit: Limit, valid_from: datetime | None, *, by: Person | None, reason: str, **values: Any) -> LimitVersion:
    """The next version of a limit whose tap's judging is locked; what it may say was checked before."""
    now = timezone.now()
    last = limit.versions.order_by("-number").first()
    begins = valid_from or (now if last else now - FIRST_LIMIT_LOOKS_BACK)
    if begins > now:
        raise WriteError("valid_from", "It lies in the future.", "Leave it out: the limit holds from now on.")
    if last is not None and begins <= last.valid_from:
        raise WriteError(
            "valid_from", f"The present version holds since {last.valid_from.isoformat()}.", "Choose a later moment."
        )
    if valid_from is not None:
        check_not_into_a_run(limit, valid_from, now)
    version = LimitVersion.objects.create(
        limit=limit, number=last.number + 1 if last else 1, valid_from=begins, set_by=by, reason=reason, **values
    )
    _judge_again(limit.tap_id, begins)
    note_in_runs(version, now)
    note(
        by,
        "retire limit" if version.is_retired else "set limit",
        limit,
        None if last is None else version_facts(last),
        version_facts(version),
        reason,
    )
    publish({"kind": "limits", "ids": [limit.pk], "experiments": [limit.experiment_id]})
    return version


def _judge_again(tap_id: int, begins: datetime) -> None:
    """Leave a mark for the pipeline: what was read since ``begins`` is to be judged by the new version."""
    heard = TapHeard.objects.filter(tap_id=tap_id).first()
    first_us = us_of(begins)
    last_us = max(heard.last_at_us, first_us) if heard else first_us
    Touch.objects.create(
        tap_id=tap_id, first_at_us=first_us, last_at_us=last_us, arrival_us=heard.last_arrival_us if heard else first_us
    )


def _set_taps(experiment: Experiment, taps: list[Tap]) -> None:
    leaving = set(experiment.taps.values_list("pk", flat=True)) - {tap.pk for tap in taps}
    for limit in experiment.limits.filter(tap_id__in=leaving):
        last = limit.versions.order_by("-number").first()
        if last and not last.is_retired:
            raise WriteError(
                "taps", f"{limit.tap.station.name}/{limit.tap.name} still has a limit on {limit.quantity}.", "Retire it first."
            )
    experiment.taps.set(taps)


def _save_once(experiment: Experiment) -> None:
    try:
        with transaction.atomic():
            experiment.save()
    except IntegrityError as fault:
        raise WriteError("name", f"There is already an experiment called {experiment.name}.", "Choose another name.") from fault


def _checked_name(name: str) -> str:
    stripped = name.strip()
    if not stripped or len(stripped) > 200:
        raise WriteError("name", "An experiment needs a name of 1 to 200 characters.", "Say what it is, for example EOM input.")
    return stripped


def _checked_wait(field: str, value: float | None) -> float | None:
    if value is None:
        return None
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not math.isfinite(value) or value <= 0:
        raise WriteError(field, f"{value!r} is not a time above 0.", "Give seconds.")
    return float(value)


def _facts(experiment: Experiment) -> dict[str, Any]:
    return {
        "name": experiment.name,
        "owner": experiment.owner.username if experiment.owner else None,
        "taps": sorted(f"{station}/{tap}" for station, tap in experiment.taps.values_list("station__name", "name")),
        "no_reading_after_s": experiment.no_reading_after_s,
        "untrusted_after_s": experiment.untrusted_after_s,
    }


def version_facts(version: LimitVersion) -> dict[str, Any]:
    """A version as the audit keeps it."""
    fields = ("number", "valid_from", *VALUES, "is_retired")
    return {field: getattr(version, field) for field in fields}
