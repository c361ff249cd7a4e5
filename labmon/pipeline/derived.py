"""Judging what rests on minutes: trusted shares, times to the limit, and the outlook of every limit on ER or angle.

Where one-minute cells were made (anew), a row of `AheadDue` says so. What is judged is folded from the newest checkpoint before
them, by the fold that judges seconds; late data go back to a kept one. Safe to run twice; a fixed number of queries for a chunk.
"""

import time
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Final

from django.db import connection, transaction

from analysis.judge.derived import (
    MINUTE_US,
    Minutes,
    bin_us,
    drift_of,
    last_window,
    look_back_us,
    share_seconds,
    time_seconds,
    whole_bins,
)
from analysis.judge.fold import FoldState
from analysis.judge.phases import Found, Phase, Standing, episodes_in, fold_through, phase_at
from analysis.judge.rule import Quantity
from analysis.judge.seconds import Seconds, concatenate
from analysis.record.tap_minutes import minutes_of
from ingest.times import SECOND_US, at_of
from ingest.times import now_us as server_now_us
from labmon.ahead.outlooks import Said, outlooks_of, save_outlooks
from labmon.ahead.words import outlook_aside
from labmon.alarms.models import Alarm, AlarmKind
from labmon.alarms.settle import Finding, TapHere, settle
from labmon.claims import JUDGING, claim_taps
from labmon.live.publish import publish
from labmon.pipeline.save import save_standings
from labmon.pipeline.work import LimitWork, limits_of_taps, standing_from_text

CHUNK_TAPS: Final = 64
MOST_CANDIDATES: Final = 1024
#: So much of a tap's time is judged in one go; the rest stays due.
LONGEST_US: Final = 2 * 86_400 * SECOND_US
#: Checkpoints are kept at whole hours; late data go back to one of them.
KEEP_EVERY_US: Final = 3600 * SECOND_US
#: Cells come some seconds after their minute, and an entry waits for the next: what is older than this is past.
CURRENT_WITHIN_US: Final = 240 * SECOND_US
HOSTS: Final = (Quantity.ER_DB, Quantity.ANGLE_DEG)


@dataclass(slots=True)
class _Work:
    """A tap that is due: ``from_us`` up to ``until_us`` in whole minutes, and ``newest_us``, up to where cells are complete."""

    tap: TapHere
    due: tuple[int, int]
    last_at_us: int
    limits: list[LimitWork]
    from_us: int = 0
    until_us: int = 0
    newest_us: int = 0
    starts: dict[int, Standing] = field(default_factory=dict)

    @property
    def derived(self) -> list[LimitWork]:
        return [one for one in self.limits if Quantity(one.limit.quantity).is_derived]

    def hosts_of(self, experiment_id: int) -> list[list[Phase]]:
        """Phases of the limits on ER or angle that an experiment's trend runs towards."""
        return [one.phases for one in self.limits if one.limit.quantity in HOSTS and one.limit.experiment_id == experiment_id]

    def window_s(self, experiment_id: int, at_us: int) -> float | None:
        """The window of the experiment's limit on the time to the limit, None where it has none."""
        for one in self.derived:
            phase = phase_at(one.phases, at_us)
            is_it = one.limit.quantity == Quantity.TIME_TO_LIMIT_S and one.limit.experiment_id == experiment_id
            if is_it and phase is not None and not phase.is_retired:
                return phase.rule.window_s
        return None


def judge_derived(now_us: int | None = None, *, for_s: float = float("inf")) -> int:
    """Judge what is due (or as much as ``for_s`` seconds allow); returns how many visits to taps it took."""
    visited, began = 0, time.monotonic()
    while time.monotonic() - began < for_s:
        step = _chunk(server_now_us() if now_us is None else now_us)
        if not step:
            break
        visited += step
    return visited


def mark_derived_due(spans: Iterable[tuple[int, int, int]]) -> None:
    """One-minute cells of (tap id, first, last µs) were made: for taps with a limit."""
    rows = [list(column) for column in zip(*spans, strict=True)]
    if rows:
        with connection.cursor() as cursor:
            cursor.execute(
                """
                INSERT INTO labmon_aheaddue (tap_id, first_us, last_us)
                SELECT tap, min(first_us), max(last_us) FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[])
                    AS t(tap, first_us, last_us)
                WHERE EXISTS (SELECT FROM labmon_limit WHERE tap_id = tap) GROUP BY tap ORDER BY tap
                ON CONFLICT (tap_id) DO UPDATE SET first_us = least(labmon_aheaddue.first_us, excluded.first_us),
                    last_us = greatest(labmon_aheaddue.last_us, excluded.last_us)""",
                rows,
            )


@transaction.atomic
def _chunk(now_us: int) -> int:
    works = _due_works()
    if not works:
        return 0
    _go_back(works)
    for work in works:
        _plan(work)
    minutes = minutes_of({work.tap.pk: _span_of(work) for work in works if work.limits})
    told_us = {limit_id: kept.at_us for limit_id, kept in outlooks_of(_host_ids(works)).items()}
    findings: list[Finding] = []
    newest: list[tuple[int, Standing]] = []
    kept: list[Standing] = []
    said: list[Said] = []
    alarms = _alarms_of(works)
    for work in works:
        own = minutes.get(work.tap.pk)
        if own is None:
            continue
        said += _outlooks(work, own, told_us)
        for limit in work.derived:
            _judge(work, limit, own, alarms.get(limit.limit.pk, []), now_us, findings, newest, kept)
    alarm_ids = settle(findings)
    save_standings(newest, kept)
    save_outlooks(said)
    _settle_due(works)
    if alarm_ids:
        publish({"kind": "alarm", "ids": alarm_ids})
    return len(works)


def _due_works() -> list[_Work]:
    """Taps that are due and that nobody else judges."""
    with connection.cursor() as cursor:
        cursor.execute("SELECT tap_id FROM labmon_aheaddue ORDER BY first_us LIMIT %s", [MOST_CANDIDATES])
        ids = claim_taps(JUDGING, [row[0] for row in cursor.fetchall()], CHUNK_TAPS)
        if not ids:
            return []
        cursor.execute(
            """
            SELECT tap.id, station.name, tap.name, tap.kind, tap.unit, tap.interval_s, due.first_us, due.last_us, heard.last_at_us
            FROM labmon_aheaddue due JOIN ingest_tap tap ON tap.id = due.tap_id
            JOIN ingest_station station ON station.id = tap.station_id LEFT JOIN ingest_tapheard heard ON heard.tap_id = tap.id
            WHERE due.tap_id = ANY(%s) ORDER BY tap.id FOR UPDATE OF due""",
            [ids],
        )
        rows = cursor.fetchall()
    limits = limits_of_taps(ids)
    return [_Work(TapHere(*row[:6]), (row[6], row[7]), row[8] or row[7], limits.get(row[0], [])) for row in rows]


def _go_back(works: Sequence[_Work]) -> None:
    """Where each derived limit's fold starts: where it stands, or at its newest kept checkpoint before what was made anew."""
    back: dict[int, tuple[LimitWork, int]] = {}
    for work in works:
        for limit in work.derived:
            standing = limit.standing_or_start()
            target = min(work.due[0] // MINUTE_US * MINUTE_US, standing.at_us)
            if limit.is_overtaken():
                target = min(target, limit.overtaken_from_us())
            work.starts[limit.limit.pk] = standing
            if target < standing.at_us and limit.standing is not None:
                back[limit.limit.pk] = (limit, target)
    found = _kept_before({limit_id: target for limit_id, (_, target) in back.items()})
    for work in works:
        for limit in work.derived:
            if limit.limit.pk in back:
                fresh = Standing(limit.phases[0].version_id, limit.start_us, FoldState())
                work.starts[limit.limit.pk] = found.get(limit.limit.pk, fresh)


def _kept_before(targets: Mapping[int, int]) -> dict[int, Standing]:
    """The newest kept checkpoint of each limit at or before a time; later ones are dropped."""
    if not targets:
        return {}
    asked = [list(targets), list(targets.values())]
    with connection.cursor() as cursor:
        cursor.execute(
            """
            DELETE FROM labmon_foldcheckpoint point USING labmon_limitversion version,
                unnest(%s::bigint[], %s::bigint[]) AS t(lim, target)
            WHERE point.version_id = version.id AND version.limit_id = lim AND NOT point.is_newest AND point.at_us > target""",
            asked,
        )
        cursor.execute(
            """
            SELECT DISTINCT ON (lim) lim, point.version_id, point.at_us, point.state::text
            FROM unnest(%s::bigint[], %s::bigint[]) AS t(lim, target)
            JOIN labmon_limitversion version ON version.limit_id = lim
            JOIN labmon_foldcheckpoint point ON point.version_id = version.id AND NOT point.is_newest AND point.at_us <= target
            ORDER BY lim, point.at_us DESC, version.number DESC""",
            asked,
        )
        return {limit_id: standing_from_text(*point) for limit_id, *point in cursor.fetchall()}


def _plan(work: _Work) -> None:
    """How far the tap is judged this time."""
    reached = [standing.at_us for limit in work.derived if (standing := limit.standing) is not None]
    work.newest_us = max([work.due[1] // MINUTE_US * MINUTE_US, *(at_us // MINUTE_US * MINUTE_US for at_us in reached)])
    starts = [standing.at_us for standing in work.starts.values()]
    work.from_us = min([*starts, work.newest_us]) // MINUTE_US * MINUTE_US
    first_us = max(work.from_us, work.due[0] // MINUTE_US * MINUTE_US - LONGEST_US)  # a limit may begin long before any reading
    work.until_us = min(work.newest_us, first_us + LONGEST_US)


def _span_of(work: _Work) -> tuple[int, int]:
    """The minutes that the tap's limits rest on, beginning and ending where every bin of drift does."""
    windows = [(Quantity(limit.limit.quantity), phase.rule.window_s) for limit in work.derived for phase in limit.phases]
    backs = [look_back_us(*window) for window in [(Quantity.TIME_TO_LIMIT_S, None), *windows]]
    longest_us = max(backs) * 37 // 36 + MINUTE_US  # a bin more, since the first must be whole
    earliest_us = max(work.from_us, work.until_us - LONGEST_US)
    return (earliest_us - longest_us) // MINUTE_US * MINUTE_US, work.until_us


def _alarms_of(works: Sequence[_Work]) -> dict[int, list[Alarm]]:
    """Alarms that the stretches may touch, locked."""
    starts = {limit_id: standing.at_us for work in works for limit_id, standing in work.starts.items()}
    if not starts:
        return {}
    rows = (
        Alarm.objects.select_for_update(of=("self",)).select_related("experiment")
        .filter(limit_id__in=starts, kind=AlarmKind.LIMIT).exclude(returned_at__lt=at_of(min(starts.values()))).order_by("pk")
    )
    found: dict[int, list[Alarm]] = {}
    for alarm in sorted(rows, key=lambda one: (one.is_withdrawn, one.raised_at)):
        if alarm.returned_at is None or alarm.returned_at >= at_of(starts[alarm.limit_id]):
            found.setdefault(alarm.limit_id, []).append(alarm)
    return found


def _judge(work: _Work, limit: LimitWork, minutes: Minutes, existing: list[Alarm], now_us: int, findings: list[Finding],
           newest: list[tuple[int, Standing]], kept: list[Standing]) -> None:
    start = work.starts[limit.limit.pk]
    if start.at_us >= work.until_us and limit.standing is not None:
        return
    cut_us = work.until_us // KEEP_EVERY_US * KEEP_EVERY_US
    at_cut, parts = _folded(work, limit, minutes, start, max(cut_us, start.at_us))
    at_end, more = _folded(work, limit, minutes, at_cut, work.until_us)
    newest.append((limit.limit.pk, at_end))
    if cut_us > start.at_us and at_cut.at_us == cut_us:
        kept.append(at_cut)
    found = [one for part in (*parts, *more) for one in part.found]
    if not (existing or found or start.state.level is not None):
        return
    seconds = concatenate([part.seconds for part in (*parts, *more)])
    is_newest = work.until_us >= work.newest_us
    findings.append(Finding(
        limit=limit.limit, tap=work.tap, phases=limit.phases, episodes=episodes_in(found, start, seconds),
        window_us=(start.at_us, work.until_us), is_newest=is_newest,
        age_us=max(now_us - work.last_at_us, 0) if is_newest else CURRENT_WITHIN_US + 1,
        last_us=work.until_us, current_within_us=CURRENT_WITHIN_US + round(seconds.entry_s * SECOND_US), existing=existing,
        aside=_aside(work, limit, minutes),
    ))


@dataclass(frozen=True, slots=True)
class _Part:
    """A stretch of one version: its entries, and what was found in it."""

    seconds: Seconds
    found: list[Found]


def _folded(work: _Work, limit: LimitWork, minutes: Minutes, standing: Standing, until_us: int) -> tuple[Standing, list[_Part]]:
    """Fold up to a moment, each version over entries of its own window."""
    parts = []
    for phase in limit.phases:
        if phase.until_us <= standing.at_us or phase.from_us > until_us:
            continue
        seconds = _seconds(work, limit, phase, minutes, standing.at_us)
        standing, found = fold_through(limit.phases, standing, seconds, None, min(phase.until_us, until_us))
        parts.append(_Part(seconds.take(seconds.at_us < min(phase.until_us, until_us)), found))
    return Standing(standing.version_id, max(standing.at_us, until_us), standing.state), parts


def _seconds(work: _Work, limit: LimitWork, phase: Phase, minutes: Minutes, from_us: int) -> Seconds:
    """Entries of a derived limit as one of its versions takes them."""
    window_s = phase.rule.window_s
    if limit.limit.quantity == Quantity.TRUSTED_SHARE:
        return share_seconds(minutes, window_s, from_us)
    end_us, drift = drift_of(whole_bins(minutes, window_s), window_s, work.hosts_of(limit.limit.experiment_id))
    return time_seconds(end_us, drift, window_s, from_us)


def _host_ids(works: Sequence[_Work]) -> list[int]:
    return [one.limit.pk for work in works for one in work.limits if one.limit.quantity in HOSTS]


def _outlooks(work: _Work, minutes: Minutes, told_us: Mapping[int, int]) -> list[Said]:
    """The newest outlook of each limit on ER or angle in force, where a bin of drift has ended since the one told."""
    said = []
    for limit in work.limits if work.until_us >= work.newest_us else []:
        phase = phase_at(limit.phases, work.until_us)
        if limit.limit.quantity not in HOSTS or phase is None or phase.is_retired:
            continue
        window_s = work.window_s(limit.limit.experiment_id, work.until_us)
        is_told = told_us.get(limit.limit.pk, 0) >= work.until_us // bin_us(window_s) * bin_us(window_s)
        if is_told and work.due[0] >= told_us[limit.limit.pk] and phase.from_us < told_us[limit.limit.pk]:
            continue
        end_us, drift = drift_of(last_window(minutes, window_s), window_s, [[phase]])
        said.append(Said.of_drift(limit.limit.pk, window_s, int(end_us[-1]), drift, phase))
    return said


def _aside(work: _Work, limit: LimitWork, minutes: Minutes) -> str:
    """What a warning ahead says besides: the band, and how far it is now."""
    if limit.limit.quantity != Quantity.TIME_TO_LIMIT_S:
        return ""
    phase = phase_at(limit.phases, work.until_us)
    window_s, hosts = phase.rule.window_s if phase else None, work.hosts_of(limit.limit.experiment_id)
    end_us, drift = drift_of(last_window(minutes, window_s), window_s, hosts)
    return outlook_aside(drift, hosts, end_us)


def _settle_due(works: Sequence[_Work]) -> None:
    """Take off what was judged; leave what lies behind a piece. A row that grew meanwhile stays."""
    done = [(work.tap.pk, *work.due) for work in works if work.until_us >= work.newest_us]
    rest = [(work.tap.pk, work.until_us, *work.due) for work in works if work.until_us < work.newest_us]
    with connection.cursor() as cursor:
        if done:
            cursor.execute(
                """DELETE FROM labmon_aheaddue due
                   USING unnest(%s::bigint[], %s::bigint[], %s::bigint[]) AS t(tap, first_us, last_us)
                   WHERE due.tap_id = tap AND due.first_us = t.first_us AND due.last_us = t.last_us""",
                [list(column) for column in zip(*done, strict=True)],
            )
        if rest:
            cursor.execute(
                """UPDATE labmon_aheaddue due SET first_us = t.from_us
                   FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[], %s::bigint[]) AS t(tap, from_us, first_us, last_us)
                   WHERE due.tap_id = tap AND due.first_us = t.first_us""",
                [list(column) for column in zip(*rest, strict=True)],
            )
