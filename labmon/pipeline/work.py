"""What the pipeline knows of a chunk of taps before it reads them: a fixed number of queries, however many taps."""

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import msgspec
from django.db import connection

from analysis.judge.fold import FoldState
from analysis.judge.phases import FOREVER_US, Phase, Standing, phases_of
from analysis.judge.rule import LimitRule, Quantity
from analysis.record.tap_state import TapState
from ingest.times import SECOND_US, us_of
from labmon.alarms.settle import LimitHere, TapHere

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

    limit: LimitHere
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
        if self.phases[-1].version_id == self.standing.version_id:
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

    tap: TapHere
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
    states, limits, watched = _states(ids), limits_of_taps(ids), _watched(ids)
    works = []
    for tap, touched in _touched(ids):
        state, now_us, last_trusted = states.get(tap.pk) or (TapState(), None, {})
        experiment_id, after_s = watched.get(tap.pk, (None, None))
        own = [one for one in limits.get(tap.pk, []) if not Quantity(one.limit.quantity).is_derived]
        works.append(TapWork(tap, touched, state, now_us, last_trusted, own, after_s, experiment_id))
    return works


def _touched(tap_ids: list[int]) -> list[tuple[TapHere, Touched]]:
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT tap.id, station.name, tap.name, tap.kind, tap.unit, tap.interval_s, touch.ids, touch.first_us, touch.last_us,
                   heard.last_at_us, heard.last_arrival_us
            FROM ingest_tap tap JOIN ingest_station station ON station.id = tap.station_id
            LEFT JOIN (SELECT tap_id, array_agg(id) AS ids, min(first_at_us) AS first_us, max(last_at_us) AS last_us
                       FROM ingest_touch WHERE tap_id = ANY(%s) GROUP BY tap_id) AS touch ON touch.tap_id = tap.id
            LEFT JOIN ingest_tapheard heard ON heard.tap_id = tap.id
            WHERE tap.id = ANY(%s) ORDER BY tap.id""",
            [tap_ids, tap_ids],
        )
        return [(TapHere(*row[:6]), Touched(row[6] or [], *row[7:])) for row in cursor.fetchall()]


def _states(tap_ids: list[int]) -> dict[int, tuple[TapState, int | None, dict[str, Any]]]:
    with connection.cursor() as cursor:
        cursor.execute(
            """SELECT tap_id, at_us, trust_state::text, (sample->'last_trusted')::text
                          FROM analysis_tapnow WHERE tap_id = ANY(%s)""",
            [tap_ids],
        )
        return {
            tap_id: (state_from_text(state), at_us, msgspec.json.decode(last) if last else {})
            for tap_id, at_us, state, last in cursor.fetchall()
        }


def state_from_text(text: str) -> TapState:
    """A stored tap state."""
    return TapState.from_json(msgspec.json.decode(text))


def limits_of_taps(tap_ids: list[int]) -> dict[int, list[LimitWork]]:
    """Limits of the taps, derived ones too, with all their versions and their newest checkpoints."""
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT lim.tap_id, lim.id, lim.experiment_id, lim.quantity, version.id, version.valid_from, version.is_retired,
                   version.in_runs_only, version.alarm, version.warning, version.on_delay_s, version.off_delay_s,
                       version.deadband, version.window_s,
                   point.at_us, point.state::text
            FROM labmon_limit lim JOIN labmon_limitversion version ON version.limit_id = lim.id
            LEFT JOIN labmon_foldcheckpoint point ON point.version_id = version.id AND point.is_newest
            WHERE lim.tap_id = ANY(%s) ORDER BY lim.id, version.number""",
            [tap_ids],
        )
        rows = cursor.fetchall()
    by_limit: dict[int, list[tuple[Any, ...]]] = {}
    for row in rows:
        by_limit.setdefault(row[1], []).append(row)
    works: dict[int, list[LimitWork]] = {}
    for own in by_limit.values():
        tap_id, limit_id, experiment_id, quantity = own[0][:4]
        phases = phases_of([(row[4], _rule(quantity, row), us_of(row[5]), row[6], row[7]) for row in own])
        points = [standing_from_text(row[4], row[14], row[15]) for row in own if row[14] is not None]
        standing = max(points, key=lambda one: one.at_us, default=None)
        works.setdefault(tap_id, []).append(LimitWork(LimitHere(limit_id, experiment_id, quantity), phases, standing))
    return works


def _rule(quantity: str, row: tuple[Any, ...]) -> LimitRule:
    return LimitRule(
        quantity=Quantity(quantity), alarm=row[8], warning=row[9], on_delay_s=row[10], off_delay_s=row[11], deadband=row[12],
        window_s=row[13],
    )


def standing_from_text(version_id: int, at_us: int, state: str) -> Standing:
    """A stored checkpoint of a limit's fold."""
    return Standing(version_id, at_us, FoldState.from_json(msgspec.json.decode(state)))


def _watched(tap_ids: list[int]) -> dict[int, tuple[int, float]]:
    """Per watched tap an experiment to tell, and the shortest wait before an untrusted reading is told."""
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT link.tap_id, min(experiment.id), min(experiment.untrusted_after_s)
            FROM labmon_experiment_taps link JOIN labmon_experiment experiment ON experiment.id = link.experiment_id
            WHERE link.tap_id = ANY(%s) GROUP BY link.tap_id""",
            [tap_ids],
        )
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
