"""What people, calibrations and alarms said of a tap's past: where history is cut, where somebody aligned, what had a name."""

from datetime import datetime, timedelta
from itertools import pairwise
from typing import Final

from django.db.models import Q

from analysis.models import Calibration
from analysis.outlook.minutes import Happenings
from analysis.outlook.window import LabelledSpan
from analysis.record.calibrations import versions_of
from ingest.models import Tap
from ingest.times import at_of, us_of
from labmon.alarms.models import Alarm, AlarmHold, HoldKind
from labmon.logbook.models import LogEntry
from labmon.logbook.queries import configuration_changes

#: Calibration fields that say that the bench, or the meaning of its angle, is another one; a new zero says no such thing.
CUTTING: Final = ("gain_ratio", "wanted_port", "wanted_state", "handedness", "leakage", "monitor_ratio", "bright_nominal")
#: A log entry about a moment may name what happened so long before and after it.
ENTRY_REACH: Final = timedelta(minutes=30)
MOST_LABELS: Final = 500
LONGEST_LABEL: Final = 80


def happenings(tap: Tap, since_us: int, until_us: int) -> Happenings:
    """What is known of a tap's span; a fixed number of queries."""
    since, until = at_of(since_us), at_of(until_us)
    changes = [at for at in configuration_changes(tap, since) if at <= until]
    changes += [at for at in _calibration_changes(versions_of([tap.pk]).get(tap.pk, [])) if since <= at <= until]
    return Happenings(
        changed_at_us=tuple(sorted({us_of(at) for at in changes})), realigned_at_us=_realigned(tap, since, until),
        labels=(*_alarm_labels(tap, since, until), *_entry_labels(tap, since, until)))


def _calibration_changes(versions: list[Calibration]) -> list[datetime]:
    """When a version, oldest first, changed more than zeros and floors; the first version only says what had been so far."""
    return [after.valid_from for before, after in pairwise(versions)
            if any(getattr(before, name) != getattr(after, name) for name in CUTTING)]


def _realigned(tap: Tap, since: datetime, until: datetime) -> tuple[int, ...]:
    """Whoever works at a bench keeps all of a tap's alarms quiet: from then on the night is another story."""
    holds = AlarmHold.objects.filter(tap=tap, alarm_kind="", begun_at__gte=since, begun_at__lte=until,
                                     kind__in=[HoldKind.SHELVED, HoldKind.OUT_OF_SERVICE])
    return tuple(us_of(at) for at in holds.order_by("begun_at").values_list("begun_at", flat=True)[:MOST_LABELS])


def _alarm_labels(tap: Tap, since: datetime, until: datetime) -> list[LabelledSpan]:
    """Alarms of the tap whose cause is known."""
    rows = Alarm.objects.filter(tap=tap, raised_at__lte=until, is_withdrawn=False)
    rows = rows.filter(Q(returned_at=None) | Q(returned_at__gte=since)).exclude(cause="").order_by("-raised_at")
    rows = rows.values_list("raised_at", "returned_at", "cause")[:MOST_LABELS]
    return [LabelledSpan(start_us=us_of(raised_at - ENTRY_REACH), end_us=us_of(returned_at or until), label=_short(cause))
            for raised_at, returned_at, cause in rows]


def _entry_labels(tap: Tap, since: datetime, until: datetime) -> list[LabelledSpan]:
    """Entries of the logbook about the tap or the whole bench."""
    rows = LogEntry.objects.filter(Q(tap=None) | Q(tap=tap), station_id=tap.station_id, struck_at=None, at__lte=until)
    rows = rows.filter(Q(at__gte=since) | Q(until_at__gte=since)).order_by("-at")
    return [LabelledSpan(start_us=us_of(at - ENTRY_REACH), end_us=us_of((until_at or at) + ENTRY_REACH),
                         label=_short(f"{tag}: {text}" if text else tag))
            for at, until_at, tag, text in rows.values_list("at", "until_at", "tag", "text")[:MOST_LABELS]]


def _short(text: str) -> str:
    plain = " ".join(text.split())
    return plain if len(plain) <= LONGEST_LABEL else plain[: LONGEST_LABEL - 1].rstrip() + "…"
