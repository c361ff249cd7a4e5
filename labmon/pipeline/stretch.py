"""Which stretch of a tap's time is judged next: forward from where it stands, or again from a checkpoint for late data."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

from django.db import connection

from analysis.judge.fold import FoldState
from analysis.judge.phases import Standing, phase_at
from analysis.record.tap_state import TapState
from ingest.times import SECOND_US
from labmon.pipeline.work import TapWork, floor_s, limits_within, newest_known_us, standing_from_text, state_from_text

#: Checkpoints are kept at whole multiples of this; late data go back to one of them.
KEEP_EVERY_US: Final = 600 * SECOND_US
#: Rolling up starts at whole multiples of this.
SNAPSHOT_EVERY_US: Final = 10 * SECOND_US
HOUR_US: Final = 3600 * SECOND_US
#: About so many readings of a tap are judged in one transaction; longer stretches go piece by piece.
PIECE_READINGS: Final = 100_000


@dataclass(slots=True)
class Stretch:
    """One piece of one tap's time.

    Attributes:
        start_us, end_us: Readings from the start up to before the end are read.
        is_newest: It reaches the newest reading. ``is_again``: it was judged before (late data, a new calibration or limit).
    """

    work: TapWork
    start_us: int
    end_us: int
    is_newest: bool
    is_again: bool

    @property
    def expected_readings(self) -> float:
        """About how many readings it holds."""
        return (self.end_us - self.start_us) / SECOND_US / self.work.interval_s


def plan_stretches(works: Sequence[TapWork]) -> list[Stretch]:
    """The next stretch of each tap. Works whose taps go back get the state of the checkpoint they go back to."""
    targets = {work.tap.pk: target for work in works if (target := _back_to(work)) is not None}
    if targets:
        _go_back({work.tap.pk: work for work in works if work.tap.pk in targets}, targets)
    return [_stretch(work, work.tap.pk in targets) for work in works]


def _back_to(work: TapWork) -> int | None:
    """The data time from which something judged must be judged again; None where the way is forward."""
    upto_us = work.state.upto_us
    if upto_us is None:
        return None
    targets = [limit.overtaken_from_us() for limit in work.limits if limit.is_overtaken()]
    targets += [limit.start_us for limit in work.limits if limit.standing is None and limit.start_us < upto_us]
    touched = work.touched
    if touched.first_us is not None and floor_s(touched.first_us) < upto_us and limits_within(work.limits, touched.last_us or 0):
        targets.append(floor_s(touched.first_us))
    return min(targets) if targets and min(targets) < upto_us else None


def _go_back(works: dict[int, TapWork], targets: dict[int, int]) -> None:
    """Set each work to where it stood at its newest kept checkpoint at or before its target (or at the target, anew)."""
    kept = _kept_states(targets)
    points = {tap_id: kept[tap_id][0] if tap_id in kept else floor_s(target) for tap_id, target in targets.items()}
    standings = _kept_standings(works, points)
    for tap_id, work in works.items():
        point_us, before = points[tap_id], work.state
        state = kept[tap_id][1] if tap_id in kept else TapState(upto_us=point_us)
        # What belongs to the present (who was told of an untrusted reading, arrivals) is not judged again.
        work.state = replace(
            state,
            upto_us=point_us,
            untrusted=before.untrusted,
            untrusted_upto_us=before.untrusted_upto_us,
            arrivals_us=before.arrivals_us,
        )
        work.begins_anew = tap_id not in kept
        for limit in work.limits:
            phase = phase_at(limit.phases, point_us)
            fresh = None if phase is None else Standing(phase.version_id, point_us, FoldState())
            limit.standing = standings.get((limit.limit.pk, point_us), fresh)


def _kept_states(targets: dict[int, int]) -> dict[int, tuple[int, TapState]]:
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT asked.tap, point.at_us, point.state::text FROM unnest(%s::bigint[], %s::bigint[]) AS asked(tap, at_us)
            CROSS JOIN LATERAL (SELECT at_us, state FROM analysis_tapcheckpoint WHERE tap_id = asked.tap AND at_us <= asked.at_us
                                ORDER BY at_us DESC LIMIT 1) AS point""",
            [list(targets), list(targets.values())],
        )
        return {tap: (at_us, state_from_text(state)) for tap, at_us, state in cursor.fetchall()}


def _kept_standings(works: dict[int, TapWork], points: dict[int, int]) -> dict[tuple[int, int], Standing]:
    asked = [(limit.limit.pk, points[tap_id]) for tap_id, work in works.items() for limit in work.limits]
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT version.limit_id, point.at_us, point.version_id, point.state::text
            FROM unnest(%s::bigint[], %s::bigint[]) AS asked(limit_id, at_us)
            JOIN labmon_limitversion version ON version.limit_id = asked.limit_id
            JOIN labmon_foldcheckpoint point ON point.version_id = version.id AND point.at_us = asked.at_us
                AND NOT point.is_newest
            ORDER BY version.number""",
            [[one for one, _ in asked], [at_us for _, at_us in asked]],
        )
        return {
            (limit_id, at_us): standing_from_text(version_id, at_us, state)
            for limit_id, at_us, version_id, state in cursor.fetchall()
        }


def _stretch(work: TapWork, is_again: bool) -> Stretch:
    newest_us, first_us = newest_known_us(work), work.touched.first_us
    start_us = work.state.upto_us
    if start_us is None:
        start_us = floor_s(first_us) if first_us is not None else 0
        work.begins_anew = True
    # The pieces behind the first of a stretch that is judged again go forward, over seconds that were judged before.
    is_again = is_again or (work.now_us is not None and floor_s(work.now_us) > start_us)
    if newest_us is None:
        return Stretch(work, start_us, start_us, True, is_again)
    behind_us = max(newest_us + 1, start_us)
    piece_us = max(HOUR_US, round(PIECE_READINGS * work.interval_s) * SECOND_US)
    if behind_us - start_us <= piece_us:
        return Stretch(work, start_us, behind_us, True, is_again)
    end_us = (start_us + piece_us) // HOUR_US * HOUR_US
    if not is_again and first_us is not None and first_us >= end_us:
        end_us = min(floor_s(first_us) // KEEP_EVERY_US * KEEP_EVERY_US, behind_us)  # nothing new lies between
        end_us = max(end_us, (start_us // HOUR_US + 1) * HOUR_US)
    return Stretch(work, start_us, end_us, False, is_again)
