"""What benches share, as the database has it."""

from collections import defaultdict
from collections.abc import Iterable

from django.db.models import Exists, OuterRef, Q

from ingest.models import Station, Tap
from labmon.events.shared import BenchThings, Thing, ThingKind

_COLUMN = {
    ThingKind.BENCH: "name",
    ThingKind.ROOM: "room__name",
    ThingKind.LASER: "bench__laser",
    ThingKind.LOGGER: "bench__logger",
    ThingKind.NETWORK: "bench__network",
}


def things_by_tap(tap_ids: Iterable[int]) -> dict[int, BenchThings]:
    """Of each tap the bench it stands on, and what that shares; one query."""
    columns = ("station__name", "station__room__name", *(f"station__bench__{one}" for one in ("laser", "logger", "network")))
    rows = Tap.objects.filter(pk__in=set(tap_ids)).values_list("pk", *columns, "station__bench__is_drill")
    return {pk: BenchThings(*(one or "" for one in said), is_drill=bool(is_drill)) for pk, *said, is_drill in rows}


def members_of(things: Iterable[Thing]) -> dict[Thing, set[str]]:
    """Watched benches of each thing; one query."""
    asked = [tuple(one) for one in things if one[0] != ThingKind.BENCH]
    if not asked:
        return {}
    which = Q()
    for kind, name in asked:
        which |= Q(**{_COLUMN[ThingKind(kind)]: name})
    watched = Tap.experiments.through.objects.filter(tap__station=OuterRef("pk"))
    columns = {one: _COLUMN[one] for one in ThingKind}
    found: dict[Thing, set[str]] = defaultdict(set)
    for row in Station.objects.filter(which, Exists(watched)).exclude(bench__is_drill=True).values(*columns.values()):
        for kind, name in asked:
            if row[columns[ThingKind(kind)]] == name:
                found[kind, name].add(row["name"])
    return dict(found)
