"""Spans of a tap that are doubtful until a person has spoken: their only writer, and reading them for the reducers."""

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime

from django.db import transaction

from analysis.models import Doubt
from analysis.record.calibrations import mark_span_due
from analysis.reduce.trust import Reason
from ingest.models import TapHeard
from ingest.times import us_of

FOREVER_US = (1 << 63) - 1


@dataclass(frozen=True, slots=True)
class DoubtSpan:
    """Readings from ``from_us`` up to, not including, ``until_us`` are doubtful for ``reason``."""

    from_us: int
    until_us: int
    reason: Reason


def doubts_of(tap_ids: Iterable[int]) -> dict[int, list[DoubtSpan]]:
    """For each tap that has some, its spans; one query."""
    rows = Doubt.objects.filter(tap_id__in=list(tap_ids)).exclude(answer=Doubt.Answer.RIGHT)
    found: dict[int, list[DoubtSpan]] = {}
    for tap_id, from_us, until_us, code in rows.values_list("tap_id", "from_us", "until_us", "reason"):
        span = DoubtSpan(from_us, FOREVER_US if until_us is None else until_us, reason_of(code))
        found.setdefault(tap_id, []).append(span)
    return found


def reason_of(code: str) -> Reason:
    """The reason of a stored code."""
    return Reason[code.upper()]


@transaction.atomic
def note_doubt(tap_id: int, reason: Reason, about: str, from_us: int, text: str) -> bool:
    """Cast doubt on a tap's readings from a moment on; False where that has been said before."""
    _, is_new = Doubt.objects.get_or_create(tap_id=tap_id, reason=reason.code, about=about,
                                            defaults={"from_us": from_us, "text": text[:500]})
    if is_new:
        _mark_due(tap_id, from_us)
    return is_new


def end_doubt(doubt: Doubt, answer: Doubt.Answer, at: datetime, by: str) -> None:
    """A person's word, within the caller's transaction and lock; what was derived since is made anew."""
    doubt.answer, doubt.answered_at, doubt.answered_by = answer, at, by
    doubt.until_us = us_of(at) if answer == Doubt.Answer.MENDED else None
    doubt.save(update_fields=["answer", "answered_at", "answered_by", "until_us"])
    _mark_due(doubt.tap_id, doubt.from_us)


def _mark_due(tap_id: int, from_us: int) -> None:
    heard = TapHeard.objects.filter(tap_id=tap_id).first()
    if heard is not None:
        mark_span_due(heard, from_us, heard.last_at_us)
