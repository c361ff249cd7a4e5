"""What a run's start makes of open alarms of limits that call in runs only: they are heard."""

from collections.abc import Sequence

from labmon.alarms.calls import RUN_BEGAN, call_people
from labmon.alarms.models import Alarm, AlarmKind
from labmon.alarms.states import is_quiet, state_of
from labmon.live.publish import publish


def wake_alarms(run_id: int, experiment_id: int, tap_ids: Sequence[int]) -> list[int]:
    """Hear the open alarms of "in runs only" limits anew and call once for each; returns their ids.

    An alarm that was suppressed now counts; one that somebody acknowledged in an earlier run is unacknowledged again, for
    this run may be somebody else's. Call it holding the taps (labmon/claims.py).
    """
    rows = (
        Alarm.objects.select_for_update(of=("self",))
        .select_related("tap__station")
        .filter(kind=AlarmKind.LIMIT, experiment=experiment_id, tap__in=tap_ids, version__in_runs_only=True)
        .filter(returned_at=None, is_withdrawn=False)
    )
    woken = list(rows.order_by("pk"))
    for alarm in woken:
        alarm.is_suppressed = alarm.is_late = False
        alarm.acknowledged_at = alarm.acknowledged_by = None
        alarm.state, alarm.changed = state_of(alarm), alarm.changed + 1
    if woken:
        fields = ["is_suppressed", "is_late", "acknowledged_at", "acknowledged_by", "state", "changed"]
        Alarm.objects.bulk_update(woken, fields)
        names = {alarm.tap_id: f"{alarm.tap.station.name}/{alarm.tap.name}" for alarm in woken}
        call_people([(alarm, f"{RUN_BEGAN}-{run_id}") for alarm in woken if not is_quiet(alarm)], names)
        publish({"kind": "alarm", "ids": [alarm.pk for alarm in woken]})
    return [alarm.pk for alarm in woken]
