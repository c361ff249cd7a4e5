"""Where false readings come from: a station that is no bench, with one tap, experiment and limit for each person drilled.

Its readings never touch those of a real tap; who looks at benches, experiments or statistics does not find it
(`labmon.people.rights` leaves it out), and its alarms say "drill".
"""

import json
from datetime import datetime, timedelta
from typing import Final

from django.conf import settings
from django.db import transaction
from django.utils import timezone

from ingest.models import Station, Tap, TapKind, Unit
from ingest.stations import NewTap, add_tap, make_key
from labmon.benches.models import Bench
from labmon.claims import lock_name
from labmon.experiments.actions import set_limit
from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.tell.faults import SendFault
from labmon.tell.post import Answer, post

STATION: Final = "labmon-drill"
GOOD_DB, LOW_DB, LIMIT_DB = 30.0, 12.0, 20.0
ON_DELAY_S: Final = 3.0
#: Readings of a false drop, one a second up to now: good ones, then low ones.
GOOD_COUNT, LOW_COUNT = 5, 10
KEY_LASTS: Final = timedelta(minutes=5)


@transaction.atomic
def drill_tap(person: Person) -> Tap:
    """The tap, experiment and limit of drills of ``person``; made at the first."""
    lock_name("drill-bench")
    station, _ = Station.objects.get_or_create(name=STATION)
    Bench.objects.update_or_create(station=station, defaults={"is_drill": True, "purpose": "false readings of drills"})
    name = f"person-{person.pk}"
    tap = Tap.objects.filter(station=station, name=name).first()
    if tap is None:
        tap = add_tap(station, NewTap(name, TapKind.TWO_PORT, Unit.W, interval_s=1.0))
    experiment, is_new = Experiment.objects.get_or_create(name=f"labmon drill of person {person.pk}", defaults={"owner": person})
    if is_new:
        experiment.taps.set([tap])
        limits = {"alarm": LIMIT_DB, "on_delay_s": ON_DELAY_S, "off_delay_s": ON_DELAY_S}
        set_limit(experiment, tap, "er_db", **limits, by=None, reason="drill")
    elif experiment.owner_id != person.pk:
        experiment.owner = person
        experiment.save(update_fields=["owner"])
    return tap


def send_readings(tap: Tap, boot: str, levels_db: list[float], now: datetime, first_sequence: int = 0) -> Answer:
    """Post marked readings through the real door, one a second up to ``now``, with a key that lasts some minutes.

    Raises:
        SendFault: The door did not answer, or refused.
    """
    now_us = int(now.timestamp() * 1e6)
    count = len(levels_db)
    body = {
        "boot": boot,
        "now": {"at": now_us},
        "firmware": "labmon drill",
        "taps": {
            tap.name: {
                "sequence": list(range(first_sequence, first_sequence + count)),
                "at": [now_us - (count - 1 - number) * 1_000_000 for number in range(count)],
                "port1": [1e-3] * count,
                "port2": [1e-3 * 10.0 ** (-level / 10.0) for level in levels_db],
            }
        },
    }
    key = make_key(tap.station, timezone.now() + KEY_LASTS)
    url = f"{settings.DOOR_URL or settings.PUBLIC_URL}/api/v1/readings"
    headers = {"Content-Type": "application/json", "Authorization": f"Bearer {key}"}
    answer = post(url, json.dumps(body).encode(), headers, is_public_only=False)
    if not answer.is_taken:
        raise SendFault(f"{url} {answer}")
    return answer


def false_drop() -> list[float]:
    """Levels of a false drop, dB."""
    return [GOOD_DB] * GOOD_COUNT + [LOW_DB] * LOW_COUNT


def all_good() -> list[float]:
    """Levels that end it, dB."""
    return [GOOD_DB] * GOOD_COUNT
