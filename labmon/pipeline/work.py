"""What the pipeline knows of a chunk of taps before it reads them: a fixed number of queries, however many taps."""

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import msgspec
from django.db import connection

from analysis.judge.fold import FoldState
from analysis.record.tap_state import TapState
from ingest.models import Tap
from ingest.times import SECOND_US, us_of
from labmon.experiments.models import Limit, LimitVersion
from labmon.experiments.rules import rule_of
from labmon.pipeline.phases import FOREVER_US, Phase, Standing, phases_of

DEFAULT_INTERVAL_S: Final = 1.0


@dataclass(slots=True)
class Touched:
    """The marks of one tap: their ids, the span they name (None: only the open second is due), and the tap's newest times."""

    ids: list[int]
    first_us: int | None
    last_us: int | None
    newest_us: int | None
    last_arrival_us: int | None


@dataclass(slots=True)
class LimitWork:
    """A limit with its phases, and where its fold stands (None: before its first second)."""

    limit: Limit
    phases: list[Phase]
    standing: Standing | None = None

    @property
    def start_us(self) -> int:
        """Where the first version begins."""
        return self.phases[0].from_us

    def standing_or_start(self) -> Standing:
        """The standing, or the start of the first phase."""
        return self.standing or Standing(self.phases[0].version_id, self.start_us, FoldState())

    def is_overtaken(self) -> bool:
        """True if a version ended before the point up to which it was folded."""
        if self.standing is None:
            return False
        phase = next((one for one in self.phases if one.version_id == self.standing.version_id), None)
        return phase is None or phase.until_us < self.standing.at_us

    def overtaken_from_us(self) -> int:
        """Where the version that was overtaken ends."""
        version_id = self.standing_or_start().version_id
        return next((phase.until_us for phase in self.phases if phase.version_id == version_id), self.start_us)


@dataclass(slots=True)
class TapWork:
    """All about one tap that is to be judged."""

    tap: Tap
    touched: Touched
    state: TapState
    now_us: int | None
    last_trusted: dict[str, Any]
    limits: list[LimitWork] = field(default_factory=list)
    untrusted_after_s: float | None = None
    experiment_id: int | None = None
    begins_anew: bool = False
    """True where nothing was ever read before the stretch: its start is a checkpoint too."""

    @property
    def interval_s(self) -> float:
        """Declared, else the median of the recent spacings, else 1 s."""
        return self.tap.interval_s or self.state.interval.interval_s or DEFAULT_INTERVAL_S


def load_work(tap_ids: Sequence[int]) -> list[TapWork]:
    """The work of claimed taps, in the order of their ids."""
    ids = list(tap_ids)
    taps = {tap.pk: tap for tap in Tap.objects.filter(pk__in=ids).select_related("station")}
    touched, states, limits, watched = _touched(ids), _states(ids), _limits(ids), _watched(ids)
    works = []
    for tap_id in ids:
        if tap_id not in taps:
            continue
        state, now_us, last_trusted = states.get(tap_id, (TapState(), None, {}))
        work = TapWork(taps[tap_id], touched[tap_id], state, now_us, last_trusted, limits.get(tap_id, []))
        if tap_id in watched:
            work.experiment_id, work.untrusted_after_s = watched[tap_id]
        works.append(work)
    return works


def _touched(tap_ids: list[int]) -> dict[int, Touched]:
    with connection.cursor() as cursor:
        cursor.execute("""
            SELECT asked.id, array_remove(array_agg(touch.id), NULL), min(touch.first_at_us), max(touch.last_at_us),
                   max(heard.last_at_us), max(heard.last_arrival_us)
            FROM unnest(%s::bigint[]) AS asked(id)
            LEFT JOIN ingest_touch touch ON touch.tap_id = asked.id
            LEFT JOIN ingest_tapheard heard ON heard.tap_id = asked.id
            GROUP BY asked.id""", [tap_ids])
        return {row[0]: Touched(*row[1:]) for row in cursor.fetchall()}


def _states(tap_ids: list[int]) -> dict[int, tuple[TapState, int | None, dict[str, Any]]]:
    with connection.cursor() as cursor:
        cursor.execute("""
            SELECT tap_id, at_us, trust_state::text, (sample->'last_trusted')::text FROM analysis_tapnow WHERE tap_id = ANY(%s)""", [tap_ids])
        return {tap_id: (state_from_text(state), at_us, msgspec.json.decode(last) if last else {})
                for tap_id, at_us, state, last in cursor.fetchall()}


def state_from_text(text: str) -> TapState:
    """A stored tap state."""
    return TapState.from_json(msgspec.json.decode(text))


def _limits(tap_ids: list[int]) -> dict[int, list[LimitWork]]:
    """Limits of the taps with their versions and newest checkpoints; limits whose life is over before any checkpoint stay in."""
    limits = {limit.pk: limit for limit in Limit.objects.filter(tap_id__in=tap_ids).select_related("experiment__owner").order_by("pk")}
    if not limits:
        return {}
    versions: dict[int, list[tuple[int, Any, int, bool, bool]]] = {}
    for version in LimitVersion.objects.filter(limit_id__in=limits).order_by("limit_id", "number"):
        rule = rule_of(version, limits[version.limit_id].quantity)
        versions.setdefault(version.limit_id, []).append((version.pk, rule, us_of(version.valid_from), version.is_retired, version.in_runs_only))
    standings = _newest_standings(list(limits))
    works: dict[int, list[LimitWork]] = {}
    for limit_id, own in versions.items():
        limit = limits[limit_id]
        works.setdefault(limit.tap_id, []).append(LimitWork(limit, phases_of(own), standings.get(limit_id)))
    return works


def _newest_standings(limit_ids: list[int]) -> dict[int, Standing]:
    with connection.cursor() as cursor:
        cursor.execute("""
            SELECT version.limit_id, point.version_id, point.at_us, point.state::text
            FROM labmon_foldcheckpoint point JOIN labmon_limitversion version ON version.id = point.version_id
            WHERE point.is_newest AND version.limit_id = ANY(%s) ORDER BY point.at_us""", [limit_ids])
        return {limit_id: standing_from_text(version_id, at_us, state) for limit_id, version_id, at_us, state in cursor.fetchall()}


def standing_from_text(version_id: int, at_us: int, state: str) -> Standing:
    """A stored checkpoint of a limit's fold."""
    return Standing(version_id, at_us, FoldState.from_json(msgspec.json.decode(state)))


def _watched(tap_ids: list[int]) -> dict[int, tuple[int, float]]:
    """Per watched tap an experiment to tell, and the shortest wait before an untrusted reading is told."""
    with connection.cursor() as cursor:
        cursor.execute("""
            SELECT link.tap_id, (array_agg(experiment.id ORDER BY experiment.id))[1], min(experiment.untrusted_after_s)
            FROM labmon_experiment_taps link JOIN labmon_experiment experiment ON experiment.id = link.experiment_id
            WHERE link.tap_id = ANY(%s) GROUP BY link.tap_id""", [tap_ids])
        return {tap_id: (experiment_id, after_s) for tap_id, experiment_id, after_s in cursor.fetchall()}


def newest_known_us(work: TapWork) -> int | None:
    """Data time of the newest reading: stored, or (a mark may come first) as marked."""
    known = [at_us for at_us in (work.touched.newest_us, work.touched.last_us, work.now_us) if at_us is not None]
    return max(known) if known else None


def floor_s(at_us: int) -> int:
    """Start of the whole second."""
    return at_us // SECOND_US * SECOND_US


def limits_within(limits: Sequence[LimitWork], until_us: int) -> list[LimitWork]:
    """Limits that have begun by a data time."""
    return [work for work in limits if work.start_us <= until_us < FOREVER_US]


