"""Lab floors: the least that limits on a bench or a tap must ask for. Only a manager sets, lowers or lifts one."""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

from django.db import transaction
from django.db.models import Q

from analysis.judge.rule import LimitRule, Quantity
from ingest.models import Station, Tap
from labmon.alarms.words import value_text
from labmon.audit.actions import note
from labmon.errors import WriteError
from labmon.experiments.models import LimitFloor, LimitVersion
from labmon.experiments.rules import LIMITED, checked_level, checked_quantity, rule_of
from labmon.live.publish import publish
from labmon.people.models import Person


@dataclass(frozen=True, slots=True)
class Floor:
    """The floor that rules for a tap and a quantity: the stricter of the tap's own and its bench's."""

    quantity: Quantity
    value: float
    is_of_tap: bool

    def allows(self, level: float) -> bool:
        """True where an alarm level is at the floor or on its strict side."""
        return level <= self.value if self.quantity.is_bad_above else level >= self.value


@transaction.atomic
def set_floor(station: Station, quantity: str, value: float | None, *, by: Person | None, reason: str,
              tap: Tap | None = None) -> LimitFloor:
    """A new floor for all taps of a bench, or for one; ``value`` None lifts it. Limits below it stay until they are set anew.

    Raises:
        WriteError: The quantity or the value cannot be meant, or no reason is given.
    """
    named = checked_quantity(quantity, tap) if tap is not None else _known(quantity)
    if not reason.strip():
        raise WriteError("reason", "A floor binds everybody on the bench.", "Say why.")
    Station.objects.select_for_update().get(pk=station.pk)
    before = newest_floors(Q(station=station, tap=tap, quantity=named.value))
    if value is None and not (before and before[0].value is not None):
        raise WriteError("value", "There is no floor to lift.", "Give a value to set one.")
    made = LimitFloor.objects.create(station=station, tap=tap, quantity=named.value, set_by=by, reason=reason.strip()[:500],
                                     value=None if value is None else checked_level("value", named, value))
    note(by, "lift floor" if value is None else "set floor", tap or station, _facts(before[0]) if before else None, _facts(made),
         made.reason)
    publish({"kind": "limits", "ids": []})
    return made


def newest_floors(which: Q) -> list[LimitFloor]:
    """The newest row of each bench, tap and quantity, lifted ones too; one query."""
    rows = LimitFloor.objects.filter(which).select_related("station", "tap", "set_by")
    return list(rows.order_by("station__name", "tap__name", "quantity", "-set_at", "-pk")
                .distinct("station__name", "tap__name", "quantity"))


def floors_of(taps: Iterable[Tap]) -> dict[tuple[int, str], Floor]:
    """Floors by (tap id, quantity); one query."""
    taps = list(taps)
    rows = newest_floors(Q(station__in={tap.station_id for tap in taps})) if taps else []
    found: dict[tuple[int, str], Floor] = {}
    for tap in taps:
        for row in rows:
            if row.station_id != tap.station_id or row.tap_id not in (None, tap.pk) or row.value is None:
                continue
            floor, key = Floor(Quantity(row.quantity), row.value, row.tap_id is not None), (tap.pk, row.quantity)
            if key not in found or not floor.allows(found[key].value):
                found[key] = floor
    return found


def check_floor(tap: Tap, rule: LimitRule) -> None:
    """Raises WriteError where the rule asks for less than the lab's floor."""
    floor = floors_of([tap]).get((tap.pk, rule.quantity.value))
    if floor is not None and not floor.allows(rule.alarm):
        side = "at most" if rule.quantity.is_bad_above else "at least"
        whose = f"{tap.station.name}/{tap.name}" if floor.is_of_tap else tap.station.name
        asked = value_text(rule.quantity, floor.value)
        raise WriteError("alarm", f"The lab's floor for {whose} is {asked}.",
                         f"Choose {side} {asked}. Only a lab manager may lower the floor.")


def limits_beyond(floor: LimitFloor) -> list[LimitVersion]:
    """Limits in force that ask for less than a floor does."""
    if floor.value is None:
        return []
    taps = Q(limit__tap=floor.tap_id) if floor.tap_id else Q(limit__tap__station=floor.station_id)
    versions = (LimitVersion.objects.filter(taps, limit__quantity=floor.quantity)
                .select_related("limit__tap__station", "limit__experiment").order_by("limit", "-number").distinct("limit"))
    asked = Floor(Quantity(floor.quantity), floor.value, floor.tap_id is not None)
    return [one for one in versions if not one.is_retired and not asked.allows(rule_of(one, floor.quantity).alarm)]


def _known(quantity: str) -> Quantity:
    if quantity not in LIMITED:
        raise WriteError("quantity", f"{quantity!r} is no quantity.", f"Use one of {', '.join(LIMITED)}.")
    return Quantity(quantity)


def _facts(floor: LimitFloor) -> dict[str, Any]:
    return {"tap": floor.tap.name if floor.tap else None, "quantity": floor.quantity, "value": floor.value}
