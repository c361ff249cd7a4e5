"""The untrusted-reading alarm: one a tap, on the server's clock; an untrusted reading never raises anything else."""

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime, timedelta

from ingest.times import at_of
from labmon.alarms.calls import RAISED, call_people
from labmon.alarms.holds import StandingHolds
from labmon.alarms.models import Alarm, AlarmKind, AlarmLevel
from labmon.alarms.settle import TapHere
from labmon.alarms.states import is_quiet, state_of
from labmon.alarms.words import untrusted_sentence


@dataclass(frozen=True, slots=True)
class UntrustedFinding:
    """Where a watched tap's untrusted fold stands, and why its newest sample is not trusted (in words)."""

    tap: TapHere
    experiment_id: int | None
    is_open: bool
    is_current: bool
    reasons: list[str]
    after_s: float = 0.0


def settle_untrusted(findings: Iterable[UntrustedFinding], now_us: int) -> list[int]:
    """Raise and return alarms as the findings say; returns the ids of those that changed."""
    wanted = {finding.tap.pk: finding for finding in findings}
    if not wanted:
        return []
    open_alarms = {
        alarm.tap_id: alarm
        for alarm in Alarm.objects.select_for_update(of=("self",))
        .filter(tap_id__in=wanted, kind=AlarmKind.UNTRUSTED, returned_at=None, is_withdrawn=False)
        .order_by("pk")
    }
    now = at_of(now_us)
    raised = [_new_alarm(one, now) for one in wanted.values() if one.is_open and one.is_current and one.tap.pk not in open_alarms]
    returned = [alarm for tap_id, alarm in open_alarms.items() if not wanted[tap_id].is_open]
    for alarm in returned:
        alarm.returned_at, alarm.changed = now, alarm.changed + 1
        alarm.state = state_of(alarm)
    if returned:
        Alarm.objects.bulk_update(returned, ["returned_at", "state", "changed"])
    if raised:
        standing = StandingHolds.of(alarm.tap_id for alarm in raised)
        for alarm in raised:
            standing.mark(alarm)
            alarm.state = state_of(alarm)
        Alarm.objects.bulk_create(raised)
        names = {pk: one.tap.full_name for pk, one in wanted.items()}
        call_people([(alarm, RAISED) for alarm in raised if not is_quiet(alarm)], names)
    return [alarm.pk for alarm in (*raised, *returned)]


def _new_alarm(finding: UntrustedFinding, now: datetime) -> Alarm:
    return Alarm(
        kind=AlarmKind.UNTRUSTED,
        experiment_id=finding.experiment_id,
        tap_id=finding.tap.pk,
        level=AlarmLevel.ALARM,
        began_at=now - timedelta(seconds=finding.after_s),
        raised_at=now,
        cause="; ".join(finding.reasons)[:100],
        message=untrusted_sentence(finding.tap.full_name, finding.reasons),
    )
