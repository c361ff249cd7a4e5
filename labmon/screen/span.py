"""The span a page shows: from the address, else the last 24 hours."""

from dataclasses import dataclass
from datetime import datetime, timedelta

from labmon.api.span import Span, parse_span

USUAL = timedelta(hours=24)
SHORTEST = timedelta(seconds=10)


@dataclass(frozen=True, slots=True)
class ShownSpan:
    """A span; ``is_following`` while it moves on with the clock; ``fault`` when the address could not be read."""

    span: Span
    is_following: bool
    fault: str = ""

    @property
    def text(self) -> str:
        """ISO 8601, whole seconds, as the address keeps it."""
        return span_text(self.span)


def shown_span(asked: str | None, now: datetime) -> ShownSpan:
    """The span that ``asked`` names; without one the last 24 hours."""
    usual = Span(now - USUAL, now)
    if not asked:
        return ShownSpan(usual, is_following=True)
    try:
        return ShownSpan(parse_span(asked), is_following=False)
    except ValueError as error:
        return ShownSpan(
            usual, is_following=True, fault=f"The span in the address cannot be used: {error}. Shown are the last 24 hours."
        )


def span_text(span: Span) -> str:
    """ISO 8601 interval with whole seconds."""
    return "/".join(moment.strftime("%Y-%m-%dT%H:%M:%SZ") for moment in (span.from_at, span.until_at))


def changed_span(span: Span, now: datetime, *, move: float = 0.0, scale: float = 1.0) -> Span:
    """Moved by a share of its width or scaled about its middle; it never ends after ``now`` (format.js does the same)."""
    width = max(SHORTEST, (span.until_at - span.from_at) * scale)
    middle = span.from_at + (span.until_at - span.from_at) * (0.5 + move)
    until_at = min(middle + width / 2, now)
    return Span(until_at - width, until_at)


def ways(span: Span, now: datetime) -> list[tuple[str, str]]:
    """The four steps as (word, span text)."""
    steps = {"earlier": {"move": -0.5}, "later": {"move": 0.5}, "closer": {"scale": 0.5}, "wider": {"scale": 2.0}}
    return [(word, span_text(changed_span(span, now, **step))) for word, step in steps.items()]
