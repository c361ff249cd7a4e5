"""How long raw readings are kept: rules set by managers, and the nightly deletion of whole days past their rule.

Without a rule they are kept for ever. Each deletion has its audit row, in the name of the rule and of who set it. Rollups stay.
"""

import logging
from typing import Final

from django.db import connection, transaction

from ingest.models import KeepRule, Tap
from ingest.store.days.forget import days_with_readings, forget_day
from ingest.store.days.seal import day_of
from ingest.times import SECOND_US, at_of
from ingest.times import now_us as server_now_us
from labmon.audit.actions import name_of, note
from labmon.errors import WriteError
from labmon.people.models import Person
from labmon.people.rights import Action, require

log = logging.getLogger(__name__)
DAY_US: Final = 86_400 * SECOND_US
MOST_DAYS: Final = 36_500
LAB: Final = "lab"
_KEPT: Final = "unset"


@transaction.atomic
def set_keep_rule(tap: Tap | None, raw_days: int | None, *, by: Person | None, reason: str = "") -> KeepRule:
    """Keep raw readings of a tap (None: of every tap without a rule of its own) at least so many days; None: for ever.

    Raises:
        WriteError: The number of days cannot be used.
    """
    if by is not None:
        require(by, Action.SET_KEEPING)
    if raw_days is not None and not 1 <= raw_days <= MOST_DAYS:
        raise WriteError("raw_days", f"Raw readings cannot be kept for {raw_days} days.", f"Write 1 to {MOST_DAYS}, or for ever.")
    rule = KeepRule.objects.select_for_update(of=("self",)).filter(tap=tap).first()
    before = {"raw kept": _days_text(rule.raw_days) if rule else _KEPT}
    rule = rule or KeepRule(tap=tap)
    rule.raw_days, rule.set_by = raw_days, by.username if by else "command line"
    rule.save()
    note(by, "set keeping of raw readings", tap if tap else LAB, before, {"raw kept": _days_text(raw_days)}, reason)
    return rule


@transaction.atomic
def end_keep_rule(tap: Tap, *, by: Person | None, reason: str = "") -> None:
    """Let the lab's rule hold for a tap again."""
    if by is not None:
        require(by, Action.SET_KEEPING)
    rule = KeepRule.objects.select_for_update().filter(tap=tap).first()
    if rule is not None:
        before = {"raw kept": _days_text(rule.raw_days)}
        rule.delete()
        note(by, "set keeping of raw readings", tap, before, {"raw kept": _KEPT}, reason)


def _days_text(raw_days: int | None) -> str:
    return "for ever" if raw_days is None else f"at least {raw_days} days"


def rule_text(rule: KeepRule) -> str:
    """A rule in words: ``raw of b08/eom-in kept at least 90 days, set by maren``."""
    whose = f"{rule.tap.station.name}/{rule.tap.name}" if rule.tap else "the lab"
    return f"raw of {whose} kept {_days_text(rule.raw_days)}, set by {rule.set_by}"


def forget_old_days(clock_us: int | None = None) -> int:
    """Delete days past their rule; give how many tap-days went. A day whose rollups are not made yet waits for another night."""
    now_us = server_now_us() if clock_us is None else clock_us
    rules = {rule.tap_id: rule for rule in KeepRule.objects.select_related("tap__station")}
    lab_rule = rules.pop(None, None)
    gone = 0
    for tap in Tap.objects.select_related("station").order_by("pk"):
        rule = rules.get(tap.pk, lab_rule)
        if rule is not None and rule.raw_days is not None:
            until_us = day_of(now_us - rule.raw_days * DAY_US)
            gone += sum(_forget(tap, day_us, rule) for day_us in days_with_readings(tap.pk, until_us))
    return gone


@transaction.atomic
def _forget(tap: Tap, day_us: int, rule: KeepRule) -> bool:
    """One day, one transaction, one audit row."""
    day = at_of(day_us).strftime("%Y-%m-%d")
    if not _is_rolled_up(tap.pk, day_us):
        log.warning("day_not_forgotten", extra={"tap_id": tap.pk, "day": day, "why": "rollups or statistics are not made yet"})
        return False
    forgotten = forget_day(tap.pk, day_us, rule_text(rule))
    note(None, "delete raw readings of a day", name_of(tap), {"day": day, "readings": forgotten.count, "bytes": forgotten.size},
         {"day": day, "raw kept": False}, rule_text(rule), as_name=f"rule, set by {rule.set_by}")
    log.info("day_forgotten", extra={"tap_id": tap.pk, "day": day, "readings": forgotten.count})
    return True


def _is_rolled_up(tap_id: int, day_us: int) -> bool:
    """Nothing of the day waits to be stored, judged, rolled up or told in statistics, and it has cells of 10 s."""
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT EXISTS (SELECT FROM analysis_rolluppage WHERE tap_id = %(tap)s AND level_s = 10 AND page_us = %(day)s)
               AND NOT EXISTS (SELECT FROM ingest_touch
                               WHERE tap_id = %(tap)s AND first_at_us < %(end)s AND last_at_us >= %(day)s)
               AND NOT EXISTS (SELECT FROM analysis_rollupdue
                               WHERE tap_id = %(tap)s AND first_at_us < %(end)s AND last_at_us >= %(day)s)
               AND NOT EXISTS (SELECT FROM analysis_daystatisticsdue WHERE tap_id = %(tap)s AND day_us = %(day)s)
               AND NOT EXISTS (SELECT FROM ingest_inboxrow
                               WHERE tap_id = %(tap)s AND first_at_us < %(end)s AND last_at_us >= %(day)s)""",
            {"tap": tap_id, "day": day_us, "end": day_us + DAY_US},
        )
        return cursor.fetchone() == (True,)
