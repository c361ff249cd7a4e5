"""What a run may be planned as: checks with sentences."""

import math
from collections.abc import Iterable, Set
from datetime import UTC, datetime, timedelta
from typing import Final

from django.utils import timezone

from ingest.models import Tap, TapKind
from labmon.errors import WriteError
from labmon.experiments.models import Experiment
from labmon.people.models import Person, Role
from labmon.runs.models import Run

#: A run is at least a minute, at most 31 days; declared at most 31 days late and 400 days ahead (our own bounds).
SHORTEST: Final = timedelta(minutes=1)
LONGEST: Final = timedelta(days=31)
LATEST_DECLARED: Final = timedelta(days=31)
FURTHEST_AHEAD: Final = timedelta(days=400)


def minute(at: datetime) -> str:
    """A time as messages show it, UTC."""
    return f"{at:%d %b %Y %H:%M} UTC"


def checked_name(name: str) -> str:
    """The name without blanks around.

    Raises:
        WriteError: It is empty or too long.
    """
    stripped = name.strip()
    if not stripped or len(stripped) > 200:
        raise WriteError("name", "A run needs a name of 1 to 200 characters.", "Say what it is for, for example Rb scan 14.")
    return stripped


def checked_reason(reason: str) -> str:
    """Why, in at most 500 characters."""
    if len(reason) > 500:
        raise WriteError("reason", "It is longer than 500 characters.", "Say it shorter; the logbook has room for more.")
    return reason.strip()


def checked_person(field: str, person: Person | None) -> Person | None:
    """Someone who can act on an alarm.

    Raises:
        WriteError: A guest, or an account that has ended.
    """
    if person is None:
        return None
    if not person.is_active or (person.role == Role.GUEST and not person.is_superuser):
        raise WriteError(field, f"{person.username} cannot act on alarms.", "Choose somebody of the lab whose account is alive.")
    return person


def checked_allowed(allowed_below_s: float) -> float:
    """Seconds that may be below the limit: 0 to a day."""
    if not _is_number(allowed_below_s) or not 0 <= allowed_below_s <= 86_400:
        raise WriteError("allowed_below_s", f"{allowed_below_s!r} is no number of seconds.", "Give 0 to 86400 s.")
    return float(allowed_below_s)


def checked_share(share: float) -> float:
    """A share of the run's time, 0 to 1."""
    if not _is_number(share) or not 0 <= share <= 1:
        raise WriteError("wanted_trusted_share", f"{share!r} is no share.", "Give 0 to 1, for example 0.95.")
    return float(share)


def checked_taps(experiment: Experiment, taps: Iterable[Tap] | None) -> list[Tap]:
    """The taps meant (None: all of the experiment that measure light), each once.

    Raises:
        WriteError: None is left, or one is not watched or measures no light.
    """
    watched = {tap.pk: tap for tap in experiment.taps.select_related("station")}
    given = [] if taps is None else list(taps)
    for tap in given:
        name = f"{tap.station.name}/{tap.name}"
        if tap.pk not in watched:
            raise WriteError("taps", f"{experiment.name} does not watch {name}.", "Add the tap to the experiment first.")
        if tap.kind == TapKind.CLIMATE:
            raise WriteError("taps", f"{name} measures no light.", "Leave it out; its temperatures are kept all the same.")
    chosen = watched if taps is None else dict.fromkeys(tap.pk for tap in given)
    light = [watched[pk] for pk in chosen if watched[pk].kind != TapKind.CLIMATE]
    if not light:
        raise WriteError("taps", "A run needs at least one tap that measures light.", "Tick one that the experiment watches.")
    return light


def in_utc(field: str, at: datetime) -> datetime:
    """The moment in UTC: two times of one zone subtract as clocks show them, and a night of clock change would be an hour off.

    Raises:
        WriteError: It has no time zone.
    """
    if timezone.is_naive(at):
        raise WriteError(field, "It has no time zone.", "Give one, for example 2031-03-04T20:00:00Z.")
    return at.astimezone(UTC)


def check_times(run: Run) -> None:
    """Raises WriteError where the run's times cannot be meant."""
    for field, at in (("starts_at", run.starts_at), ("ends_at", run.ends_at)):
        if at.microsecond:
            raise WriteError(field, "It lies between two seconds.", "Give a whole second: a ledger counts seconds.")
    length, now = run.ends_at - run.starts_at, timezone.now()
    if length < SHORTEST:
        raise WriteError("ends_at", "The run would last less than a minute.", "Choose an end after the start.")
    if length > LONGEST:
        raise WriteError("ends_at", "The run would last longer than 31 days.", "Plan it in parts: each then has its own ledger.")
    if run.starts_at > now + FURTHEST_AHEAD:
        raise WriteError("starts_at", "It lies more than 400 days ahead.", "Look at the year.")
    if run.starts_at < now - LATEST_DECLARED and run.pk is None:
        raise WriteError("starts_at", "It lies more than 31 days back.", "Declare a run at the latest a month after its start.")


def check_still_open(run: Run, changed: Set[str]) -> None:
    """Raises WriteError where the run is over or cancelled, or has begun and what changed is fixed since the start."""
    now = timezone.now()
    if run.cancelled_at:
        raise WriteError("run", f"{run.name} was cancelled.", "Plan it anew if it is wanted.")
    if run.over_at <= now:
        raise WriteError("run", f"{run.name} is over.", "Its ledger can be made anew, with the reason; the run itself stays.")
    if run.starts_at <= now and changed:
        raise WriteError(
            min(changed), "The run has begun: its start, taps and wishes stay as they were.", "Stop it and plan another."
        )


def _is_number(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
