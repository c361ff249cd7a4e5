"""The only writer of experiments, limits and their versions. Each write leaves its audit row."""

import math
from collections.abc import Iterable
from datetime import datetime, timedelta
from typing import Any

from django.db import IntegrityError, transaction
from django.utils import timezone

from ingest.models import Tap, TapHeard, Touch
from ingest.times import us_of
from labmon.audit.actions import note
from labmon.claims import JUDGING, lock_tap
from labmon.errors import WriteError
from labmon.experiments.models import Experiment, Limit, LimitVersion
from labmon.experiments.rules import LimitWish, checked_quantity, checked_wish
from labmon.live.publish import publish
from labmon.people.models import Person
from labmon.runs.limits import check_not_into_a_run, note_in_runs

#: A tap's first limit also looks at the day before it was set: an excursion that is under way is then seen as what it is.
FIRST_LIMIT_LOOKS_BACK = timedelta(days=1)
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


@transaction.atomic
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
    in_runs_only: bool = False,
    reason: str = "",
    valid_from: datetime | None = None,
    by: Person | None,
) -> LimitVersion:
    """A new version of a limit (or its first), in force from ``valid_from``.

    Left out, ``valid_from`` is now; for the first version a day earlier. The fold starts anew at that moment; an open
    alarm stays until the light is clear under the new limit.
    Raises:
        WriteError: A field cannot be meant.
    """
    if not experiment.taps.filter(pk=tap.pk).exists():
        raise WriteError(
            "tap", f"{experiment.name} does not watch {tap.station.name}/{tap.name}.", "Add the tap to the experiment first."
        )
    named = checked_quantity(quantity, tap)
    wish = LimitWish(
        alarm=alarm, warning=warning, on_delay_s=on_delay_s, off_delay_s=off_delay_s, deadband=deadband, in_runs_only=in_runs_only
    )
    rule = checked_wish(named, wish)
    lock_tap(JUDGING, tap.pk)
    limit, _ = Limit.objects.get_or_create(experiment=experiment, tap=tap, quantity=named.value)
    version = _next_version(
        limit,
        valid_from,
        by=by,
        reason=reason,
        alarm=rule.alarm,
        warning=rule.warning,
        on_delay_s=rule.on_delay_s,
        off_delay_s=rule.off_delay_s,
        deadband=rule.deadband,
        in_runs_only=in_runs_only,
    )
    return version


@transaction.atomic
def retire_limit(limit: Limit, *, by: Person | None, reason: str = "") -> LimitVersion:
    """End a limit now; its history stays, an open alarm returns."""
    lock_tap(JUDGING, limit.tap_id)
    last = limit.versions.order_by("-number").first()
    if last is None or last.is_retired:
        raise WriteError("limit", "This limit is not in force.", "Set it anew if it is wanted.")
    return _next_version(
        limit,
        None,
        by=by,
        reason=reason,
        is_retired=True,
        **{
            field: getattr(last, field) for field in ("alarm", "warning", "on_delay_s", "off_delay_s", "deadband", "in_runs_only")
        },
    )


def _next_version(limit: Limit, valid_from: datetime | None, *, by: Person | None, reason: str, **values: Any) -> LimitVersion:
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
    fields = ("number", "valid_from", "alarm", "warning", "on_delay_s", "off_delay_s", "deadband", "in_runs_only", "is_retired")
    return {field: getattr(version, field) for field in fields}
