"""Two benches alike: bench-a is its owner's and named for the guest, bench-b its neighbour's. An address finds its rows here."""

import io
import zipfile
from dataclasses import dataclass
from datetime import timedelta
from typing import Any

from django.core.files.uploadedfile import SimpleUploadedFile
from django.utils import timezone
from PIL import Image

from ingest.models import FileImport, StationKey
from labmon.alarms.models import AlarmHold, HoldKind
from labmon.events.models import Event
from labmon.evidence.files import name_of, new_file, place_of
from labmon.evidence.models import RunEvidence
from labmon.experiments.actions import set_limit
from labmon.experiments.models import Limit, LimitRequest
from labmon.logbook.actions import write_entry
from labmon.people.keys import make_person_key
from labmon.people.models import Person, Role
from labmon.runs.ledgers import ask_ledger
from labmon.runs.making import make_waiting_ledgers
from labmon.runs.models import Run
from labmon.tell.keys import key_in_force
from labmon.tell.models import KeyPurpose, PushDevice
from tests.factories import NOON, make_experiment, make_person, make_run, make_station, make_tap, store_alarm
from tests.labmon.permissions.rules import Who

ROLES = {Who.GUEST: Role.GUEST, Who.RESEARCHER: Role.RESEARCHER, Who.NEIGHBOUR: Role.OWNER, Who.OWNER: Role.OWNER,
         Who.MANAGER: Role.MANAGER}


@dataclass(frozen=True, slots=True)
class MatrixLab:
    """``people`` by Who, and those whom nobody lets in; ``rows`` of bench ``a`` and ``b`` by the names of arguments."""

    people: dict[Who, Person]
    expired: Person
    ended: Person
    rows: dict[str, dict[str, Any]]


def build() -> MatrixLab:
    """The rows; nothing of it is an invented reading."""
    people = {who: make_person(role, username=who.value) for who, role in ROLES.items()}
    expired = make_person(Role.GUEST, username="expired", guest_until=timezone.now() - timedelta(seconds=1))
    ended = make_person(Role.MANAGER, username="ended", is_active=False)
    rows = {"a": _bench("a", people[Who.OWNER], people), "b": _bench("b", people[Who.NEIGHBOUR], people)}
    for guest in (people[Who.GUEST], expired):
        guest.guest_stations.add(rows["a"]["_station"])
    return MatrixLab(people, expired, ended, rows)


def _bench(letter: str, owner: Person, people: dict[Who, Person]) -> dict[str, Any]:
    """Name and number of everything about one bench, by the name that addresses use for it."""
    station = make_station(f"bench-{letter}", owner=owner)
    tap = make_tap(station, "in")
    experiment = make_experiment(tap, owner=owner, name=f"experiment {letter}")
    version = set_limit(experiment, tap, "er_db", alarm=20.0, by=owner)
    limit = Limit.objects.get(experiment=experiment)
    about = {"kind": "limit", "experiment": experiment, "limit": limit, "tap": tap, "quantity": "er_db"}
    event = Event.objects.create(kind="light", began_at=NOON, began_until=NOON)
    alarm = store_alarm(**about, raised_at=NOON, message="low", event=event)
    hold = AlarmHold.objects.create(kind=HoldKind.SHELVED, tap=tap, alarm_kind="untrusted", by=owner, reason="x",
                                    begun_at=timezone.now(), until=timezone.now() + timedelta(hours=1))
    now = timezone.now().replace(microsecond=0)
    wish = LimitRequest.objects.create(experiment=experiment, tap=tap, quantity="er_db", loosens=["alarm"], version=version,
                                       asked_by=owner, asked_at=now, expires_at=now + timedelta(hours=1), reason="x")
    key = StationKey.objects.create(station=station, digest=letter.encode() * 32, hint=letter * 4)
    upload = FileImport.objects.create(tap=tap, file_name="x.csv", sha256=letter * 64)
    entry = write_entry(station, by=owner, at=NOON.replace(year=2026, month=1), text="spooled anew", picture=_picture())
    run = make_run(experiment, timezone.now().replace(microsecond=0) - timedelta(hours=2), owner=owner)
    ask_ledger(run, by=None)
    make_waiting_ledgers()
    _package(run)
    return {
        "_station": station, "bench": letter, "station": station.name, "tap": tap.name, "tap_id": tap.pk,
        "experiment_id": experiment.pk, "limit_id": limit.pk, "version_id": version.pk, "alarm_id": alarm.pk, "hold_id": hold.pk,
        "entry_id": entry.pk, "import_id": upload.pk, "run_id": run.pk, "ledger_number": 1, "number": 1,
        "event_id": event.pk,
        "revoke-key.key_id": key.pk,                       # an argument that means something of its own to one address
        "request_id": wish.pk, "word": "refuse",
        "person_id": people[Who.RESEARCHER].pk,
    }


def _package(run: Run) -> None:
    """A package of the run as its addresses look for it."""
    evidence = RunEvidence.objects.create(run=run, ledger=run.ledgers.get(), number=1, made_at=timezone.now(), size=1,
                                          sha256="0" * 64)
    with new_file(place_of(evidence)) as file, zipfile.ZipFile(file, "w") as package:
        for ending in ("html", "pdf"):
            package.writestr(f"{name_of(evidence)}/data/report.{ending}", "x")


def _picture() -> SimpleUploadedFile:
    out = io.BytesIO()
    Image.new("RGB", (2, 2)).save(out, "PNG")
    return SimpleUploadedFile("x.png", out.getvalue())


#: What ``{id}`` of an API path is, by the word before it.
IDS = {"experiments": "experiment_id", "alarms": "alarm_id", "holds": "hold_id", "log": "entry_id", "runs": "run_id",
       "events": "event_id", "limit-requests": "request_id"}


def own_row(name: str, person: Person) -> dict[str, int]:
    """The caller's own row for an address about own rows."""
    match name:
        case "end-device":
            key = key_in_force(KeyPurpose.PUSH)
            device = PushDevice.objects.create(person=person, key=key, endpoint=f"https://push.example/{person.pk}", name="phone")
            return {"device_id": device.pk}
        case "revoke-own-key":
            return {"key_id": make_person_key(person, by=None)[0].pk}
    raise KeyError(f"{name}: say in tests/labmon/permissions/lab.py own_row() which row of the caller's it is about")
