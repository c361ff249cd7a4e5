"""How an alarm's state follows from what happened (names of IEC 62682): pure, and the same as the database's own check."""

from typing import Protocol

from labmon.alarms.models import AlarmState


class AlarmFacts(Protocol):
    """What decides an alarm's state; a row of `Alarm` has it."""

    is_withdrawn: bool
    is_late: bool
    is_suppressed: bool
    is_out_of_service: bool
    shelved_until: object | None
    returned_at: object | None
    acknowledged_at: object | None


def state_of(alarm: AlarmFacts) -> AlarmState:
    """The state that follows from the row's facts; of several reasons to be quiet the strongest names it."""
    if alarm.is_withdrawn:
        return AlarmState.NORMAL
    if alarm.returned_at is not None:
        needs_nobody = alarm.acknowledged_at is not None or alarm.is_late or is_quiet(alarm)
        return AlarmState.NORMAL if needs_nobody else AlarmState.RETURNED_UNACKNOWLEDGED
    if alarm.is_out_of_service:
        return AlarmState.OUT_OF_SERVICE
    if alarm.is_suppressed:
        return AlarmState.SUPPRESSED
    if alarm.shelved_until is not None:
        return AlarmState.SHELVED
    return AlarmState.ACKNOWLEDGED if alarm.acknowledged_at else AlarmState.UNACKNOWLEDGED


def is_quiet(alarm: AlarmFacts) -> bool:
    """True where it calls nobody: shelved, suppressed by design or out of service."""
    return alarm.is_out_of_service or alarm.is_suppressed or alarm.shelved_until is not None
