"""What the pages say of the time to limits: the newest outlook and the back-test beside it."""

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime

from django.db.models import Q

from labmon.ahead.models import AheadScore, LimitOutlook
from labmon.alarms.models import Alarm
from labmon.people.models import Person
from labmon.people.rights import alarms_visible_to


@dataclass(frozen=True, slots=True)
class Ahead:
    """Of one limit."""

    outlook: LimitOutlook | None
    score: AheadScore | None


def ahead_of(limit_ids: Iterable[int]) -> dict[int, Ahead]:
    """By limit; two queries."""
    ids = list(limit_ids)
    outlooks, scores = LimitOutlook.objects.in_bulk(ids), AheadScore.objects.in_bulk(ids)
    return {pk: Ahead(outlooks.get(pk), scores.get(pk)) for pk in ids}


def warnings_ahead(person: Person, *, since: datetime) -> list[tuple[Alarm, AheadScore | None]]:
    """Warnings ahead that stand, and those withdrawn since a moment, that ``person`` may see, newest first, each with how such
    warnings did on the stored past; two queries."""
    rows = alarms_visible_to(person).filter(quantity="time_to_limit_s", is_suppressed=False)
    rows = rows.filter(Q(returned_at=None, is_withdrawn=False) | Q(returned_at__gte=since))
    alarms = list(rows.select_related("tap__station", "experiment").order_by("-raised_at", "-pk")[:50])
    scores = AheadScore.objects.filter(limit__tap_id__in={alarm.tap_id for alarm in alarms}).select_related("limit")
    by_place = {(one.limit.experiment_id, one.limit.tap_id): one for one in scores} if alarms else {}
    return [(alarm, by_place.get((alarm.experiment_id, alarm.tap_id))) for alarm in alarms]
