"""No reading: one alarm a watched tap, shown at three intervals of silence, called at the experiment's set time.

Judged on the server's clock, and only for time in which the door was up. One that ends before anyone was called leaves
no row.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

from django.db import connection, transaction

from analysis.models import TapNow
from analysis.record.tap_state import TapState
from ingest.models import Tap
from ingest.times import SECOND_US, at_of
from ingest.times import now_us as server_now_us
from labmon.alarms.calls import RAISED, call_people
from labmon.alarms.holds import StandingHolds
from labmon.alarms.models import Alarm, AlarmKind, AlarmLevel
from labmon.alarms.states import is_quiet, state_of
from labmon.alarms.words import no_reading_sentence
from labmon.benches.queries import call_after_s, door_spans
from labmon.benches.show import LEAST_USUAL_S, Silence, silences_of
from labmon.claims import claim_name
from labmon.live.publish import publish

SHOWN_AFTER_S = 3 * LEAST_USUAL_S


@dataclass(slots=True)
class _Changes:
    """Alarms to write, and those of whom someone is to be told."""

    new: list[Alarm]
    changed: list[Alarm]
    gone: list[int]
    called: list[Alarm]


@transaction.atomic
def judge_silence(now_us: int | None = None) -> list[int]:
    """Raise, call and return no-reading alarms; returns the ids of those that changed. A fixed number of queries."""
    if not claim_name("silence"):
        return []
    clock_us = server_now_us() if now_us is None else now_us
    open_alarms = {
        alarm.tap_id: alarm
        for alarm in Alarm.objects.select_for_update(of=("self",))
        .filter(kind=AlarmKind.NO_READING, returned_at=None, is_withdrawn=False)
        .order_by("pk")
    }
    taps = _asked_taps(list(open_alarms), clock_us)
    if not taps and not open_alarms:
        return []
    silences, experiments = _silences(taps, clock_us), _experiments([tap.pk for tap in taps])
    changes = _changes(taps, silences, experiments, open_alarms, at_of(clock_us))
    _write(changes, {tap.pk: _name(tap) for tap in taps})
    ids = [alarm.pk for alarm in (*changes.new, *changes.changed)] + changes.gone
    if ids:
        publish({"kind": "alarm", "ids": ids})
    return ids


def _asked_taps(with_alarm: list[int], now_us: int) -> list[Tap]:
    """Watched taps that have been quiet for the shortest time that could matter, and those with an open alarm."""
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT DISTINCT heard.tap_id FROM ingest_tapheard heard
            WHERE heard.tap_id = ANY(%s)
               OR (NOT EXISTS (SELECT FROM ingest_tap tap JOIN labmon_bench bench ON bench.station_id = tap.station_id
                               WHERE tap.id = heard.tap_id AND bench.is_drill) AND heard.last_arrival_us < %s
                   AND EXISTS (SELECT FROM labmon_experiment_taps link WHERE link.tap_id = heard.tap_id))""",
            [with_alarm, now_us - round(SHOWN_AFTER_S * SECOND_US)],
        )
        ids = [row[0] for row in cursor.fetchall()]
    return list(Tap.objects.filter(pk__in=ids).select_related("station", "heard").order_by("pk")) if ids else []


def _silences(taps: Sequence[Tap], now_us: int) -> dict[int, Silence]:
    ids = [tap.pk for tap in taps]
    states = {
        tap_id: TapState.from_json(state)
        for tap_id, state in TapNow.objects.filter(tap__in=ids).values_list("tap_id", "trust_state")
    }
    heard = [(tap, states.get(tap.pk), tap.heard.last_arrival_us) for tap in taps]
    return silences_of(heard, call_after_s(ids), door_spans(now_us), now_us)


def _experiments(tap_ids: Sequence[int]) -> dict[int, int]:
    """Per tap the experiment that wants to know first."""
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT DISTINCT ON (link.tap_id) link.tap_id, experiment.id
            FROM labmon_experiment_taps link JOIN labmon_experiment experiment ON experiment.id = link.experiment_id
            WHERE link.tap_id = ANY(%s) ORDER BY link.tap_id, experiment.no_reading_after_s NULLS LAST, experiment.id""",
            [list(tap_ids)],
        )
        return dict(cursor.fetchall())


def _changes(
    taps: Sequence[Tap],
    silences: Mapping[int, Silence],
    experiments: Mapping[int, int],
    open_alarms: Mapping[int, Alarm],
    now: datetime,
) -> _Changes:
    changes = _Changes([], [], [], [])
    for tap in taps:
        silence, alarm = silences[tap.pk], open_alarms.get(tap.pk)
        if alarm is not None and (not silence.is_shown or tap.pk not in experiments):
            _end(alarm, now, changes)
        elif silence.is_shown and tap.pk in experiments:
            if alarm is None:
                alarm = Alarm(
                    kind=AlarmKind.NO_READING,
                    experiment_id=experiments[tap.pk],
                    tap=tap,
                    level=AlarmLevel.WARNING,
                    began_at=now - timedelta(seconds=silence.silent_s),
                    began_until=now - timedelta(seconds=max(silence.silent_s - silence.usual_s, 0.0)),
                    raised_at=now,
                    message=no_reading_sentence(_name(tap), silence.silent_s),
                )
                changes.new.append(alarm)
            if silence.is_called and alarm.level == AlarmLevel.WARNING:
                _call(alarm, tap, silence, now, changes)
    return changes


def _call(alarm: Alarm, tap: Tap, silence: Silence, now: datetime, changes: _Changes) -> None:
    alarm.level, alarm.alarm_at, alarm.value = AlarmLevel.ALARM, now, None
    alarm.message = no_reading_sentence(_name(tap), silence.silent_s)
    changes.called.append(alarm)
    if alarm.pk is not None:
        changes.changed.append(alarm)


def _end(alarm: Alarm, now: datetime, changes: _Changes) -> None:
    if alarm.level == AlarmLevel.WARNING and alarm.acknowledged_at is None:
        changes.gone.append(alarm.pk)
        return
    alarm.returned_at = now
    alarm.state = state_of(alarm)
    changes.changed.append(alarm)


def _write(changes: _Changes, names: Mapping[int, str]) -> None:
    if changes.gone:
        Alarm.objects.filter(pk__in=changes.gone).delete()
    for alarm in changes.changed:
        alarm.changed += 1
    if changes.changed:
        Alarm.objects.bulk_update(changes.changed, ["level", "alarm_at", "message", "returned_at", "state", "changed"])
    if changes.new:
        standing = StandingHolds.of(alarm.tap_id for alarm in changes.new)
        for alarm in changes.new:
            standing.mark(alarm)
            alarm.state = state_of(alarm)
        Alarm.objects.bulk_create(changes.new)
    call_people([(alarm, RAISED) for alarm in changes.called if not is_quiet(alarm)], names)


def _name(tap: Tap) -> str:
    return f"{tap.station.name}/{tap.name}"
