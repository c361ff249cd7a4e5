"""Benches that share things, and alarms of theirs that call."""

from datetime import datetime, timedelta

from django.db import transaction
from django.utils import timezone

from labmon.alarms.calls import RAISED, call_people
from labmon.alarms.models import Alarm
from labmon.benches.models import Bench
from labmon.people.models import Person
from labmon.tell.models import Message
from tests.factories import make_experiment, make_station, make_tap, store_alarm


def make_bench(name: str, owner: Person | None = None, *, room: str = "", **things: str):
    """A bench with one watched tap; gives the tap."""
    station = make_station(name, room=room, owner=owner)
    Bench.objects.filter(station=station).update(**things)
    tap = make_tap(station, "out")
    make_experiment(tap, owner=owner, name=f"{name} watch")
    return tap


def make_alarm(
    tap, after_s: float = 0.0, *, kind: str = "no-reading", level: str = "alarm", now: datetime | None = None
) -> Alarm:
    """An alarm that began ``after_s`` from now; it has called nobody yet."""
    began_at = (now or timezone.now()) + timedelta(seconds=after_s)
    name = f"{tap.station.name}/{tap.name}"
    about = {"quantity": "er_db", "value": 18.9, "limit_value": 20.0} if kind == "limit" else {}
    text = (
        f"{name}: extinction ratio 18.9 dB is below its {level} limit 20.0 dB by 1.1 dB (1.6°)"
        if about
        else f"{name}: no reading"
    )
    return store_alarm(
        kind=kind,
        tap=tap,
        experiment=tap.experiments.first(),
        level=level,
        began_at=began_at,
        raised_at=began_at,
        message=text,
        **about,
    )


def call(*alarms: Alarm, why: str = RAISED) -> None:
    """As a worker that found them together."""
    with transaction.atomic():
        call_people([(alarm, why) for alarm in alarms])


def told(**which) -> list[tuple[str, str]]:
    """(who, kind) of each message, in order."""
    rows = Message.objects.filter(**which).order_by("pk").values_list("person__username", "kind")
    return [(name or "", kind) for name, kind in rows]
