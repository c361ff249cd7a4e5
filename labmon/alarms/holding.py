"""The only writer of holds: shelving and taking out of service, ended by hand or by their time.

Each write waits for judging of the tap, so that no alarm is raised half-way, leaves its audit row, and tells the browsers.
"""

import logging
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any

from django.db import transaction
from django.utils import timezone

from ingest.models import Tap
from labmon.alarms.calls import BACK, call_people
from labmon.alarms.holds import StandingHolds, holds, standing_holds
from labmon.alarms.models import LONGEST_SHELF, Alarm, AlarmHold, AlarmKind, AlarmLevel, HoldKind
from labmon.alarms.states import is_quiet, state_of
from labmon.audit.actions import note
from labmon.claims import JUDGING, claim_name, claim_taps, lock_name, lock_tap
from labmon.errors import WriteError
from labmon.experiments.models import Limit
from labmon.live.publish import publish
from labmon.people.models import Person

log = logging.getLogger(__name__)
_FLAGS = ["shelved_until", "is_out_of_service", "state", "changed"]


@dataclass(frozen=True, slots=True)
class Held:
    """What a hold is about: all alarms of a tap, those of one kind, or those of one limit."""

    tap: Tap
    alarm_kind: str = ""
    limit: Limit | None = None

    @classmethod
    def of_alarm(cls, alarm: Alarm) -> "Held":
        """This alarm, and those that its limit (or its tap, of this kind) may raise meanwhile."""
        return cls(alarm.tap, alarm.kind, alarm.limit)

    @classmethod
    def of_limit(cls, limit: Limit) -> "Held":
        return cls(limit.tap, AlarmKind.LIMIT, limit)


@transaction.atomic
def shelve(held: Held, *, by: Person, for_s: float, reason: str) -> AlarmHold:
    """Keep alarms quiet for a stated time; shelving what is shelved replaces its end, its reason and its name.

    Raises:
        WriteError: The time is not above 0 or longer than 4 h, or there is no reason.
    """
    longest_s = LONGEST_SHELF.total_seconds()
    if not 0 < for_s <= longest_s:
        raise WriteError("for_s", f"{for_s:g} s is no time to shelve for.", f"Choose more than 0, at most {longest_s:g} s (4 h).")
    return _begin(HoldKind.SHELVED, held, by, reason, timedelta(seconds=for_s))


@transaction.atomic
def take_out_of_service(held: Held, *, by: Person, reason: str, for_s: float | None = None) -> AlarmHold:
    """Take alarms out of service until someone puts them back, or for a stated time."""
    if for_s is not None and not 0 < for_s <= 366 * 86_400:
        raise WriteError("for_s", f"{for_s:g} s is no such time.", "Leave it out, or choose more than 0 and at most a year.")
    return _begin(HoldKind.OUT_OF_SERVICE, held, by, reason, None if for_s is None else timedelta(seconds=for_s))


@transaction.atomic
def end_hold(hold_id: int, *, by: Person, reason: str = "") -> AlarmHold:
    """End a hold before its time; a second time changes nothing.

    Raises:
        AlarmHold.DoesNotExist: There is no such hold.
    """
    hold = AlarmHold.objects.select_related("tap__station", "limit").get(pk=hold_id)
    _lock(hold.tap_id)
    return _end(hold, by, reason, timezone.now())


@transaction.atomic
def unshelve_alarm(alarm: Alarm, *, by: Person) -> list[AlarmHold]:
    """End every shelving that keeps this alarm quiet; where there is none nothing changes."""
    _lock(alarm.tap_id)
    shelved = standing_holds().filter(tap=alarm.tap_id, kind=HoldKind.SHELVED).select_related("tap__station", "limit")
    now = timezone.now()
    return [_end(hold, by, "", now) for hold in shelved.order_by("pk") if holds(hold, alarm)]


def end_due_holds(now: datetime | None = None) -> list[int]:
    """End the holds whose time is over; the beat's. Safe to run twice and side by side; returns the ids of those it ended."""
    clock = now or timezone.now()
    due = standing_holds().filter(until__lte=clock).order_by("until", "pk").values_list("pk", "tap_id")
    return [hold_id for hold_id, tap_id in due if _end_if_due(hold_id, tap_id, clock)]


@transaction.atomic
def _end_if_due(hold_id: int, tap_id: int, now: datetime) -> bool:
    """False where a worker has the tap, or somebody else was first: the next beat looks again."""
    if not claim_name("silence") or not claim_taps(JUDGING, [tap_id], 1):
        return False
    hold = standing_holds().select_related("tap__station", "limit").filter(pk=hold_id, until__lte=now).first()
    if hold is None:
        return False
    _end(hold, None, "its time was over", now)
    return True


def _lock(tap_id: int) -> None:
    """Wait until nobody judges the tap: first the one who looks for silence, then the tap's own worker."""
    lock_name("silence")
    lock_tap(JUDGING, tap_id)


def _begin(kind: HoldKind, held: Held, by: Person, reason: str, lasts: timedelta | None) -> AlarmHold:
    why = reason.replace("\0", "").strip()[:500]  # the database takes no NUL
    if not why:
        raise WriteError("reason", "Nobody would know why.", "Say in a few words why it is quiet.")
    _lock(held.tap.pk)
    now = timezone.now()
    own = {"kind": kind, "tap": held.tap, "alarm_kind": held.alarm_kind, "limit": held.limit}
    before = standing_holds().select_for_update(of=("self",)).filter(**own).first()
    if before is not None:
        before.ended_at, before.ended_by = max(now, before.begun_at), by
        before.save(update_fields=["ended_at", "ended_by"])
    hold = AlarmHold.objects.create(**own, by=by, reason=why, begun_at=now, until=None if lasts is None else now + lasts)
    action = "shelve" if kind == HoldKind.SHELVED else "take out of service"
    note(by, action, _subject(hold), before and _facts(before), _facts(hold), why)
    log.info("hold_begun", extra={"hold_id": hold.pk, "tap_id": hold.tap_id, "person_id": by.pk})
    _bring_alarms_in_line(hold)
    return hold


def _end(hold: AlarmHold, by: Person | None, reason: str, now: datetime) -> AlarmHold:
    locked = AlarmHold.objects.select_for_update(of=("self",)).select_related("tap__station", "limit").get(pk=hold.pk)
    if locked.ended_at is not None:
        return locked
    before = _facts(locked)
    locked.ended_at, locked.ended_by = max(now, locked.begun_at), by
    locked.save(update_fields=["ended_at", "ended_by"])
    action = "unshelve" if locked.kind == HoldKind.SHELVED else "put back into service"
    note(by, action, _subject(locked), before, _facts(locked), reason, as_name="labmon")
    log.info("hold_ended", extra={"hold_id": locked.pk, "tap_id": locked.tap_id, "person_id": by and by.pk})
    _bring_alarms_in_line(locked)
    return locked


def _bring_alarms_in_line(hold: AlarmHold) -> None:
    """The tap's open alarms get what holds them now; one that is loud again, and that nobody acknowledged, calls."""
    standing = StandingHolds.of([hold.tap_id])
    changed, calls = [], []
    rows = Alarm.objects.select_for_update(of=("self",)).filter(tap=hold.tap_id, returned_at=None, is_withdrawn=False)
    for alarm in rows.order_by("pk"):
        before, was_quiet = (alarm.shelved_until, alarm.is_out_of_service), is_quiet(alarm)
        standing.mark(alarm)
        if (alarm.shelved_until, alarm.is_out_of_service) == before:
            continue
        alarm.state, alarm.changed = state_of(alarm), alarm.changed + 1
        changed.append(alarm)
        if was_quiet and not is_quiet(alarm) and _calls_when_loud(alarm):
            calls.append((alarm, f"{BACK}-{hold.pk}"))
    if changed:
        Alarm.objects.bulk_update(changed, _FLAGS)
    call_people(calls, {hold.tap_id: f"{hold.tap.station.name}/{hold.tap.name}"})
    publish({"kind": "alarm", "ids": [alarm.pk for alarm in changed]})


def _calls_when_loud(alarm: Alarm) -> bool:
    is_only_noticed = alarm.kind == AlarmKind.NO_READING and alarm.level == AlarmLevel.WARNING
    return alarm.acknowledged_at is None and not alarm.is_late and not is_only_noticed


def _subject(hold: AlarmHold) -> Tap | Limit:
    return hold.limit or hold.tap


def _facts(hold: AlarmHold) -> dict[str, Any]:
    return {
        "hold": hold.pk,
        "kind": hold.kind,
        "alarms": hold.alarm_kind or "all of the tap",
        "until": hold.until,
        "ended_at": hold.ended_at,
    }
