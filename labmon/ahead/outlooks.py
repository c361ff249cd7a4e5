"""The newest outlook of each limit: written by the pipeline, read by the pages."""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from enum import StrEnum

from django.db import connection

from analysis.judge.derived import DRIFT_WINDOW_S, level_deg
from analysis.judge.phases import Phase
from analysis.outlook.recent_drift import RecentDrift
from labmon.ahead.models import LimitOutlook


class Outlook(StrEnum):
    """What can be said of the time to a limit."""

    WITHIN = "within"
    POSSIBLE = "possible"
    NOT_WITHIN = "not-within"
    BEYOND = "beyond"
    UNKNOWN = "unknown"


@dataclass(frozen=True, slots=True)
class Said:
    """An outlook to be kept; times s, None where they are later than the window is long."""

    limit_id: int
    at_us: int
    window_s: float
    said: Outlook
    angle_deg: float | None
    limit_deg: float
    median_s: float | None
    tenth_s: float | None
    turns_back: bool

    @classmethod
    def of_drift(cls, limit_id: int, window_s: float | None, at_us: int, drift: RecentDrift, phase: Phase) -> "Said":
        """Of the newest moment of a drift."""
        if not drift.is_known[-1]:
            return cls(limit_id, at_us, window_s or DRIFT_WINDOW_S, Outlook.UNKNOWN, None, level_deg(phase), None, None, False)
        median_s, tenth_s = (float(one[-1]) if math.isfinite(one[-1]) else None for one in (drift.median_s, drift.tenth_s))
        said = Outlook.NOT_WITHIN if tenth_s is None else Outlook.POSSIBLE if median_s is None else Outlook.WITHIN
        said = Outlook.BEYOND if median_s == 0.0 else said
        return cls(limit_id, at_us, window_s or DRIFT_WINDOW_S, said, float(drift.angle_deg[-1]), level_deg(phase), median_s,
                   tenth_s, bool(drift.turns_back[-1]))


def save_outlooks(outlooks: Sequence[Said]) -> None:
    """Write outlooks; a newer one of the same limit stays. One statement."""
    if not outlooks:
        return
    ordered = sorted(outlooks, key=lambda one: one.limit_id)
    names = ("limit_id", "at_us", "window_s", "said", "angle_deg", "limit_deg", "median_s", "tenth_s", "turns_back")
    with connection.cursor() as cursor:
        cursor.execute(
            f"""
            INSERT INTO labmon_limitoutlook ({", ".join(names)})
            SELECT * FROM unnest(%s::bigint[], %s::bigint[], %s::float[], %s::varchar[], %s::float[], %s::float[], %s::float[],
                                 %s::float[], %s::boolean[])
            ON CONFLICT (limit_id) DO UPDATE SET {", ".join(f"{name} = excluded.{name}" for name in names[1:])}
            WHERE labmon_limitoutlook.at_us <= excluded.at_us""",
            [[getattr(one, name) for one in ordered] for name in names],
        )


def outlooks_of(limit_ids: Iterable[int]) -> dict[int, LimitOutlook]:
    """The kept outlooks by limit; one query."""
    return LimitOutlook.objects.in_bulk(list(limit_ids))
