"""What the pipeline writes of its own state: one statement each, however many taps."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import msgspec
from django.db import connection

from analysis.judge.phases import Standing
from analysis.record.tap_state import TapState


@dataclass(frozen=True, slots=True)
class NowRow:
    """A tap's row of `TapNow`; ``sample`` None leaves the sample that is there."""

    tap_id: int
    at_us: int
    sample: dict[str, Any] | None
    state: TapState
    open_until_us: int | None


def text_of(value: Any) -> str:
    """JSON text; no NaN can pass (msgspec writes null)."""
    return msgspec.json.encode(value).decode()


def save_now(rows: Sequence[NowRow]) -> None:
    """Newest samples and states of taps."""
    with_sample = [row for row in rows if row.sample is not None]
    others = [row for row in rows if row.sample is None]
    with connection.cursor() as cursor:
        if with_sample:
            cursor.execute(
                """
                INSERT INTO analysis_tapnow (tap_id, at_us, sample, trust_state, open_until_us)
                SELECT tap, at_us, sample, state, open_until FROM json_to_recordset(%s::json)
                    AS t(tap bigint, at_us bigint, sample jsonb, state jsonb, open_until bigint)
                ON CONFLICT (tap_id) DO UPDATE SET at_us = excluded.at_us, sample = excluded.sample,
                    trust_state = excluded.trust_state,
                    open_until_us = excluded.open_until_us""",
                [
                    text_of(
                        [
                            {
                                "tap": row.tap_id,
                                "at_us": row.at_us,
                                "sample": row.sample,
                                "state": row.state.as_json(),
                                "open_until": row.open_until_us,
                            }
                            for row in with_sample
                        ]
                    )
                ],
            )
        if others:
            cursor.execute(
                """
                UPDATE analysis_tapnow SET trust_state = state, open_until_us = open_until
                FROM json_to_recordset(%s::json) AS t(tap bigint, state jsonb, open_until bigint) WHERE tap_id = tap""",
                [text_of([{"tap": row.tap_id, "state": row.state.as_json(), "open_until": row.open_until_us} for row in others])],
            )


def save_tap_checkpoints(rows: Sequence[tuple[int, int, TapState]]) -> None:
    """Kept states of taps (tap id, at µs, state)."""
    if rows:
        with connection.cursor() as cursor:
            cursor.execute(
                """
                INSERT INTO analysis_tapcheckpoint (tap_id, at_us, state)
                SELECT tap, at_us, state FROM json_to_recordset(%s::json) AS t(tap bigint, at_us bigint, state jsonb)
                ON CONFLICT (tap_id, at_us) DO UPDATE SET state = excluded.state""",
                [text_of([{"tap": tap_id, "at_us": at_us, "state": state.as_json()} for tap_id, at_us, state in rows])],
            )


def save_standings(newest: Sequence[tuple[int, Standing]], kept: Sequence[Standing]) -> None:
    """The newest checkpoint of each limit (limit id, standing), and those to keep."""
    with connection.cursor() as cursor:
        if newest:
            cursor.execute(
                """
                DELETE FROM labmon_foldcheckpoint point USING labmon_limitversion version
                WHERE point.is_newest AND version.id = point.version_id AND version.limit_id = ANY(%s)
                    AND NOT version.id = ANY(%s)""",
                [[limit_id for limit_id, _ in newest], [one.version_id for _, one in newest]],
            )
            cursor.execute(
                """
                INSERT INTO labmon_foldcheckpoint (version_id, at_us, state, is_newest)
                SELECT version, at_us, state, true
                    FROM json_to_recordset(%s::json) AS t(version bigint, at_us bigint, state jsonb)
                ON CONFLICT (version_id) WHERE is_newest DO UPDATE SET at_us = excluded.at_us, state = excluded.state""",
                [_as_records([one for _, one in newest])],
            )
        if kept:
            cursor.execute(
                """
                INSERT INTO labmon_foldcheckpoint (version_id, at_us, state, is_newest)
                SELECT version, at_us, state, false
                    FROM json_to_recordset(%s::json) AS t(version bigint, at_us bigint, state jsonb)
                ON CONFLICT (version_id, at_us, is_newest) DO UPDATE SET state = excluded.state""",
                [_as_records(kept)],
            )


def _as_records(standings: Sequence[Standing]) -> str:
    return text_of([{"version": one.version_id, "at_us": one.at_us, "state": one.state.as_json()} for one in standings])


def forget_kept(spans: Sequence[tuple[int, int, int]]) -> None:
    """Drop kept checkpoints strictly within spans (tap id, from, until µs) that were judged again."""
    if not spans:
        return
    columns = [list(column) for column in zip(*spans, strict=True)]
    with connection.cursor() as cursor:
        cursor.execute(
            """
            DELETE FROM analysis_tapcheckpoint point
                USING unnest(%s::bigint[], %s::bigint[], %s::bigint[]) AS t(tap, from_us, until_us)
            WHERE point.tap_id = tap AND point.at_us > from_us AND point.at_us <= until_us""",
            columns,
        )
        cursor.execute(
            """
            DELETE FROM labmon_foldcheckpoint point
            USING labmon_limitversion version, labmon_limit lim,
                unnest(%s::bigint[], %s::bigint[], %s::bigint[]) AS t(tap, from_us, until_us)
            WHERE point.version_id = version.id AND version.limit_id = lim.id AND lim.tap_id = tap AND NOT point.is_newest
                AND point.at_us > from_us AND point.at_us <= until_us""",
            columns,
        )


def mark_rollups_due(spans: Sequence[tuple[int, int, int]]) -> None:
    """Rollups of spans (tap id, first, last µs) are to be made anew."""
    if spans:
        with connection.cursor() as cursor:
            cursor.execute(
                """
                INSERT INTO analysis_rollupdue (tap_id, level_s, first_at_us, last_at_us)
                SELECT tap, 10, first_us, last_us
                    FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[]) AS t(tap, first_us, last_us)""",
                [list(column) for column in zip(*spans, strict=True)],
            )


def settle_touches(done: Sequence[int], rests: Sequence[tuple[int, int, int, int]]) -> None:
    """Delete the marks that were worked off; leave marks (tap id, first, last, arrival µs) for what is left of them."""
    with connection.cursor() as cursor:
        if done:
            cursor.execute("DELETE FROM ingest_touch WHERE id = ANY(%s)", [list(done)])
        if rests:
            cursor.execute(
                """
                INSERT INTO ingest_touch (tap_id, first_at_us, last_at_us, arrival_us)
                SELECT * FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[], %s::bigint[])""",
                [list(column) for column in zip(*rests, strict=True)],
            )
