"""Declared runs as judging asks for them: does one that relies on the tap cover any of an episode?"""

from collections.abc import Iterable
from dataclasses import dataclass, field

from ingest.times import at_of, us_of
from labmon.runs.queries import declared_taps

Span = tuple[int, int]


@dataclass(frozen=True, slots=True)
class RunsAround:
    """Runs by (experiment, tap) as spans in data time, µs, half open."""

    spans: dict[tuple[int, int], list[Span]] = field(default_factory=dict)

    @classmethod
    def of(cls, pairs: Iterable[tuple[int, int]], from_us: int, until_us: int) -> "RunsAround":
        """Of the (experiment id, tap id) pairs, those that overlap the span; one query, none without pairs."""
        wanted = set(pairs)
        found: dict[tuple[int, int], list[Span]] = {}
        if wanted:
            rows = declared_taps(at_of(from_us), at_of(until_us), {tap for _, tap in wanted})
            for experiment_id, tap_id, starts_at, over_at in rows:
                if (experiment_id, tap_id) in wanted:
                    found.setdefault((experiment_id, tap_id), []).append((us_of(starts_at), us_of(over_at)))
        return cls(found)

    def cover(self, experiment_id: int, tap_id: int, from_us: int, until_us: int) -> bool:
        """True if a run covers any moment from ``from_us`` to ``until_us``, both included."""
        return any(begin <= until_us and from_us < end for begin, end in self.spans.get((experiment_id, tap_id), []))
