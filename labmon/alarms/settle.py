"""Brings the alarm rows of limits in line with the episodes that the fold found; live and late alike.

A told alarm is never deleted: late data give it other bounds (the old ones are kept) or withdraw it.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from datetime import timedelta
from typing import Final

from analysis.judge.fold import Level
from analysis.judge.phases import Episode, Phase
from analysis.judge.rule import Quantity
from ingest.times import SECOND_US, at_of, us_of
from labmon.alarms.calls import RAISED, ROSE, call_people
from labmon.alarms.holds import StandingHolds
from labmon.alarms.models import Alarm, AlarmBounds, AlarmKind
from labmon.alarms.runs_around import RunsAround
from labmon.alarms.states import is_quiet, state_of
from labmon.alarms.words import limit_sentence

#: An event whose reading is older than this when it is judged (by the station's own clock) is past: it calls nobody.
CURRENT_WITHIN_US: Final = 60 * SECOND_US
_CHANGED = (
    "version",
    "level",
    "state",
    "began_at",
    "raised_at",
    "alarm_at",
    "returned_at",
    "acknowledged_at",
    "acknowledged_by",
    "value",
    "limit_value",
    "message",
    "is_late",
    "is_withdrawn",
    "is_suppressed",
    "shelved_until",
    "is_out_of_service",
    "changed",
)


@dataclass(frozen=True, slots=True)
class TapHere:
    """What judging needs of a tap."""

    pk: int
    station_name: str
    name: str
    kind: str
    unit: str
    interval_s: float | None

    @property
    def full_name(self) -> str:
        """``station/tap``."""
        return f"{self.station_name}/{self.name}"


@dataclass(frozen=True, slots=True)
class LimitHere:
    """What judging needs of a limit."""

    pk: int
    experiment_id: int
    quantity: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """What one stretch of a limit's fold says.

    Attributes:
        window_us: The stretch judged, first and behind-last µs; ``is_newest``: it reaches the newest reading.
        age_us: Age of the stretch's last reading by the station's clock, ``last_us`` its data time.
        holes: Spans of the stretch whose raw readings are gone or unreadable: nothing told of them is taken back.
        existing: Alarms of the limit that overlap the stretch (live: the open one), oldest first.
        aside: What a new alarm says besides; it stays as it was said.
    """

    limit: LimitHere
    tap: TapHere
    phases: Sequence[Phase]
    episodes: Sequence[Episode]
    window_us: tuple[int, int]
    is_newest: bool
    age_us: int
    last_us: int
    current_within_us: int
    existing: Sequence[Alarm]
    holes: Sequence[tuple[int, int]] = ()
    aside: str = ""

    @property
    def is_current(self) -> bool:
        """True if the newest reading is of now."""
        return self.is_newest and self.age_us <= self.current_within_us

    def is_past(self, at_us: int) -> bool:
        """True if what happened at a data time was past already when it was judged."""
        return self.age_us + (self.last_us - at_us) > self.current_within_us


@dataclass(slots=True)
class _Changes:
    """What is to be written, gathered over all limits so that the number of statements stays the same."""

    holds: StandingHolds
    runs: RunsAround
    new: list[Alarm] = field(default_factory=list)
    changed: dict[int, Alarm] = field(default_factory=dict)
    deleted: list[int] = field(default_factory=list)
    bounds: list[AlarmBounds] = field(default_factory=list)
    calls: list[tuple[Alarm, str]] = field(default_factory=list)


def settle(findings: Iterable[Finding]) -> list[int]:
    """Write what the findings say; returns the ids of the alarms that changed."""
    given = list(findings)
    changes = _Changes(StandingHolds.of({finding.tap.pk for finding in given}), _runs_around(given))
    names: dict[int, str] = {}
    for finding in given:
        names[finding.tap.pk] = finding.tap.full_name
        _settle_limit(finding, names[finding.tap.pk], changes)
    _write(changes)
    call_people(changes.calls, names)
    return [alarm.pk for alarm in changes.new] + list(changes.changed) + changes.deleted


def _runs_around(findings: Iterable[Finding]) -> RunsAround:
    """The runs that decide whether a limit "in runs only" is suppressed; asked for where one has an episode."""
    asked = [one for one in findings if one.episodes and any(phase.in_runs_only for phase in one.phases)]
    if not asked:
        return RunsAround()
    from_us = min(episode.raised_us for one in asked for episode in one.episodes)
    until_us = max(one.last_us for one in asked)
    return RunsAround.of(((one.limit.experiment_id, one.tap.pk) for one in asked), from_us, max(from_us, until_us))


def _write(changes: _Changes) -> None:
    if changes.deleted:
        Alarm.objects.filter(pk__in=changes.deleted).delete()
    for alarm in changes.changed.values():
        alarm.changed += 1
    # Rows that close come first: one limit has one open alarm at any moment, also inside this transaction.
    ordered = sorted(changes.changed.values(), key=lambda alarm: alarm.returned_at is None and not alarm.is_withdrawn)
    closing = [alarm for alarm in ordered if alarm.returned_at is not None or alarm.is_withdrawn]
    opening = [alarm for alarm in ordered if alarm.returned_at is None and not alarm.is_withdrawn]
    for rows in (closing, opening):
        if rows:
            Alarm.objects.bulk_update(rows, _CHANGED)
    if changes.bounds:
        AlarmBounds.objects.bulk_create(changes.bounds)
    if changes.new:
        Alarm.objects.bulk_create(changes.new)


def _settle_limit(finding: Finding, name: str, changes: _Changes) -> None:
    left = list(finding.existing)
    for episode in finding.episodes:
        alarm = _matching(episode, left)
        if alarm is None:
            _add(finding, episode, name, changes)
        else:
            left.remove(alarm)
            _bring_in_line(finding, episode, alarm, name, changes)
    for alarm in left:
        if _belongs(alarm, finding) and not _is_beyond_proof(alarm, finding):
            _take_back(alarm, changes)


def _matching(episode: Episode, alarms: Sequence[Alarm]) -> Alarm | None:
    """The first alarm that overlaps the episode; one withdrawn before is found again."""
    end_us = episode.returned_us
    for alarm in alarms:
        raised_us = us_of(alarm.raised_at)
        returned_us = us_of(alarm.returned_at) if alarm.returned_at else None
        if (end_us is None or raised_us <= end_us) and (returned_us is None or returned_us >= episode.raised_us):
            return alarm
    return None


def _belongs(alarm: Alarm, finding: Finding) -> bool:
    """True if the stretch should have found this alarm: it was raised in it (or open over all of it)."""
    from_us, until_us = finding.window_us
    raised_us = us_of(alarm.raised_at)
    if alarm.is_withdrawn:
        return False
    if raised_us >= from_us:
        return raised_us < until_us or finding.is_newest
    return alarm.returned_at is None or us_of(alarm.returned_at) > from_us


def _is_beyond_proof(alarm: Alarm, finding: Finding) -> bool:
    """True if it was told of readings that are no longer there: what they said then stands."""
    raised_us = us_of(alarm.raised_at)
    returned_us = us_of(alarm.returned_at) if alarm.returned_at else finding.window_us[1]
    return any(raised_us <= until_us and returned_us >= from_us for from_us, until_us in finding.holes)


def _add(finding: Finding, episode: Episode, name: str, changes: _Changes) -> None:
    is_suppressed = _is_outside_runs(finding, episode, changes.runs)
    alarm = Alarm(
        kind=AlarmKind.LIMIT,
        experiment_id=finding.limit.experiment_id,
        limit_id=finding.limit.pk,
        tap_id=finding.tap.pk,
        quantity=finding.limit.quantity,
        is_suppressed=is_suppressed,
        is_late=not is_suppressed,
    )
    _fill(alarm, finding, episode, name)
    changes.holds.mark(alarm)
    if not is_suppressed and _is_to_be_called(finding, episode):
        alarm.is_late = False
        if not is_quiet(alarm):
            changes.calls.append((alarm, RAISED))
    alarm.state = state_of(alarm)
    changes.new.append(alarm)


def _bring_in_line(finding: Finding, episode: Episode, alarm: Alarm, name: str, changes: _Changes) -> None:
    before = {field: getattr(alarm, field) for field in _CHANGED}
    if alarm.is_suppressed and not _is_outside_runs(finding, episode, changes.runs):
        alarm.is_suppressed, alarm.is_late = False, True  # a run has begun, or was declared: now it counts as untold
    was_warning, was_told = alarm.level == Level.WARNING, not alarm.is_late
    if alarm.is_withdrawn:
        alarm.is_withdrawn = False
    _fill(alarm, finding, episode, name)
    changes.holds.mark(alarm)
    if was_told and was_warning and alarm.level == Level.ALARM:
        alarm.acknowledged_at = alarm.acknowledged_by = None
        is_fresh = alarm.alarm_at is not None and not finding.is_past(us_of(alarm.alarm_at))
        if not is_quiet(alarm) and (is_fresh or finding.is_current):
            changes.calls.append((alarm, ROSE))
    elif not was_told and not alarm.is_suppressed and _is_to_be_called(finding, episode):
        alarm.is_late = False
        if not is_quiet(alarm):
            changes.calls.append((alarm, RAISED))
    alarm.state = state_of(alarm)
    if all(getattr(alarm, field) == value for field, value in before.items()):
        return
    has_moved = before["raised_at"] != alarm.raised_at or (
        before["returned_at"] is not None and before["returned_at"] != alarm.returned_at
    )
    if was_told and has_moved:
        changes.bounds.append(
            AlarmBounds(alarm=alarm, raised_at=before["raised_at"], returned_at=before["returned_at"], value=before["value"])
        )
    changes.changed[alarm.pk] = alarm


def _is_outside_runs(finding: Finding, episode: Episode, runs: RunsAround) -> bool:
    """True where the limit holds in runs only and no run covers any of the episode, as far as the readings go."""
    if not _phase_of(finding, episode).in_runs_only:
        return False
    until_us = max(finding.last_us, episode.raised_us) if episode.returned_us is None else episode.returned_us
    return not runs.cover(finding.limit.experiment_id, finding.tap.pk, episode.raised_us, until_us)


def _is_to_be_called(finding: Finding, episode: Episode) -> bool:
    """Fresh when it was raised, or open while the readings are of now."""
    return not finding.is_past(episode.raised_us) or (episode.returned_us is None and finding.is_current)


def _fill(alarm: Alarm, finding: Finding, episode: Episode, name: str) -> None:
    """Bounds, level, worst value and words of the episode."""
    is_new = alarm.pk is None
    began_before = us_of(alarm.raised_at) if not is_new else None
    phase = _phase_of(finding, episode)
    if is_new or not episode.is_continued:
        alarm.raised_at = at_of(episode.raised_us)
        alarm.began_at = alarm.raised_at - timedelta(seconds=phase.rule.on_delay_s)
    if episode.returned_us is not None:
        alarm.returned_at = at_of(episode.returned_us)
    elif finding.is_newest or alarm.returned_at is None or us_of(alarm.returned_at) < finding.window_us[1]:
        alarm.returned_at = None
    if episode.alarm_us is not None:
        alarm.alarm_at = at_of(episode.alarm_us)
    elif not episode.is_continued:
        alarm.alarm_at = None
    was_level, alarm.level = alarm.level, episode.level.value
    is_rejudged = not is_new and not episode.is_continued and began_before is not None and began_before >= finding.window_us[0]
    alarm.value = episode.value if is_new or is_rejudged else worse_of(alarm.quantity, alarm.value, episode.value)
    alarm.version_id = phase.version_id
    alarm.limit_value = (
        phase.rule.warning if episode.level is Level.WARNING and phase.rule.warning is not None else phase.rule.alarm
    )
    if is_new or not finding.aside or was_level != alarm.level:
        alarm.message = (limit_sentence(name, alarm.quantity, alarm.level, alarm.value, alarm.limit_value) + finding.aside)[:300]


def _phase_of(finding: Finding, episode: Episode) -> Phase:
    return next(phase for phase in finding.phases if phase.version_id == episode.version_id)


def _take_back(alarm: Alarm, changes: _Changes) -> None:
    """Later data deny it: nobody was told, it goes; somebody was, it stays and says so."""
    if alarm.is_late and alarm.acknowledged_at is None:
        changes.deleted.append(alarm.pk)
        return
    alarm.is_withdrawn = True
    alarm.state = state_of(alarm)
    changes.changed[alarm.pk] = alarm


def worse_of(quantity: str, one: float | None, other: float | None) -> float | None:
    """The worse of two values, either of which may be missing."""
    known = [value for value in (one, other) if value is not None]
    if not known:
        return None
    return max(known) if Quantity(quantity).is_bad_above else min(known)
