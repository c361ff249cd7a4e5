"""Alarms that someone is to be told of: each joins its event (one event, one call), and calls that need not wait are written.

Who is told is `labmon.events.chain`, what they are told `labmon.events.words`; calls that wait for others of the same event
are written by the worker's next look (`labmon.events.telling.tell_due`).
"""

from collections.abc import Iterable, Mapping

from django.utils import timezone

from labmon.alarms.models import Alarm
from labmon.claims import lock_name
from labmon.events.joining import join_events
from labmon.events.telling import tell_anew, tell_due

#: Why an alarm calls. BACK and RUN_BEGAN are followed by the number of the hold that ended, of the run that began.
RAISED, ROSE, BACK, RUN_BEGAN = "raised", "rose", "back", "run"


def call_people(alarms: Iterable[tuple[Alarm, str]], names: Mapping[int, str] | None = None) -> None:
    """Call for each (alarm, why); the same again changes nothing. The alarms' rows exist.

    Args:
        names: Not needed any more.
    """
    given = list(alarms)
    if not given:
        return
    lock_name("events")  # after the taps' and the alarms' locks, before nothing
    now = timezone.now()
    events = join_events(list({alarm.pk: alarm for alarm, _ in given}.values()), now)
    anew = [(alarm, why) for alarm, why in given if why not in (RAISED, ROSE)]
    if anew:
        ids = {alarm.event_id for alarm, _ in anew}
        tell_anew([event for event in events if event.pk in ids], anew, now)
    tell_due(now, [event.pk for event in events])
