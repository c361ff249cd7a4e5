"""How an alarm's state changes: the one place where states follow from what happened (names of IEC 62682)."""

from labmon.alarms.models import Alarm, AlarmState

KEPT = frozenset({AlarmState.SHELVED, AlarmState.SUPPRESSED, AlarmState.OUT_OF_SERVICE})


def state_of(alarm: Alarm) -> AlarmState:
    """The state that follows from the row's own facts; shelved, suppressed and out of service stay while it is open."""
    if alarm.is_withdrawn:
        return AlarmState.NORMAL
    is_open = alarm.returned_at is None
    if alarm.state in KEPT and is_open:
        return AlarmState(alarm.state)
    if is_open:
        return AlarmState.ACKNOWLEDGED if alarm.acknowledged_at else AlarmState.UNACKNOWLEDGED
    needs_nobody = alarm.acknowledged_at is not None or alarm.is_late or alarm.state in KEPT
    return AlarmState.NORMAL if needs_nobody else AlarmState.RETURNED_UNACKNOWLEDGED
