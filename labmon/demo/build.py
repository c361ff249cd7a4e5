"""Builds the Skerry Fibre Laboratory: people, benches, limits, two weeks of readings, and what follows from them."""

import logging
import secrets
import time
from dataclasses import dataclass
from datetime import datetime, timedelta

from django.db import transaction

from ingest.models import Station, Tap, TapKind
from ingest.stations import make_key
from ingest.times import at_of, now_us
from labmon.benches.actions import TapWish, add_bench, set_shared
from labmon.benches.calibration import set_calibration
from labmon.demo.air import ROOMS, RoomPlan
from labmon.demo.benches import BENCHES, MANAGER, RESEARCHER, STUDENT, TECHNICIAN, BenchPlan, Polarimeter, bench_named
from labmon.demo.faults import HandednessFlipped
from labmon.demo.folder import DemoNotes, read_notes, write_notes
from labmon.demo.history import TimeAxis, write_history
from labmon.demo.ledger import LEDGER
from labmon.demo.live import CLIMATE_CADENCE_S, CLIMATE_TAP
from labmon.demo.moments import DAY_S, day_one_us
from labmon.demo.people import PEOPLE
from labmon.demo.runs import declare_runs
from labmon.demo.station import Say
from labmon.demo.world import SEED, World, wanted_state
from labmon.events.actions import put_on_call
from labmon.experiments.actions import create_experiment, set_limit
from labmon.people.actions import add_person, set_guest, set_password
from labmon.people.models import Person
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.process import process_touched


@dataclass(frozen=True, slots=True)
class DemoLogin:
    """How a visitor signs in; the other people's passwords are in the data folder."""

    name: str
    password: str
    lines: list[str]


def build_demo_lab(progress: Say) -> DemoLogin:
    """Build the invented laboratory, or find it there and go on; safe to break off and to run again.

    Between two runs nobody measures: that time stays a gap.
    """
    started_s = time.monotonic()
    notes = read_notes() or DemoNotes(day_one_us=day_one_us(now_us()), seed=SEED)
    if not _has_all_stations():
        _make_lab(notes, progress)
    elif not notes.station_keys:
        _renew_access(notes, progress)
    if notes.is_built:
        progress(f"the demo laboratory is there; since {_clock(notes.built_until_us)} only live readings, and gaps between runs")
    else:
        _fill(notes, progress)
        progress(f"the demo laboratory is built ({time.monotonic() - started_s:.0f} s)")
    return _login(notes)


def _fill(notes: DemoNotes, progress: Say) -> None:
    """Readings first, then everything that follows from them, by the same path as live ones."""
    axis = TimeAxis(notes.day_one_us, notes.built_until_us)
    progress("simulating the lab's air, lasers and fibres")
    world = World(int(axis.until_s // DAY_S) + 1, notes.seed)
    before_s = time.monotonic()
    count = write_history(world, axis, progress)
    progress(f"{count:,} readings written in {time.monotonic() - before_s:.0f} s; now reducing and judging them")
    before_s = time.monotonic()
    logging.getLogger("labmon.pipeline").setLevel(logging.WARNING)  # one line a chunk would drown the progress
    judged = process_touched()
    progress(f"{judged.readings:,} readings reduced and judged in {time.monotonic() - before_s:.0f} s; now rolling them up")
    before_s = time.monotonic()
    catch_up()
    progress(f"rolled up by 10 s, minute, hour and day in {time.monotonic() - before_s:.0f} s")
    declare_runs(at_of(notes.built_until_us), progress)
    notes.is_built = True
    write_notes(notes)


def _has_all_stations() -> bool:
    wanted = {bench.station for bench in BENCHES} | {room.station for room in ROOMS}
    return Station.objects.filter(name__in=wanted).count() == len(wanted)


def _make_lab(notes: DemoNotes, progress: Say) -> None:
    """People, stations, calibrations, experiments and limits, all or none; keys and passwords go into the notes."""
    notes.built_until_us = now_us() // 1_000_000 * 1_000_000
    notes.day_one_us = day_one_us(notes.built_until_us)
    notes.is_built = False
    with transaction.atomic():
        people = _make_people(notes)
        for room in ROOMS:
            _make_room(room, notes, people)
        for bench in BENCHES:
            _make_bench(bench, notes, people)
        _name_guests(people, notes)
        _put_on_call(people, at_of(notes.built_until_us))
    write_notes(notes)
    progress(f"{len(PEOPLE)} people, {len(BENCHES)} benches in {len(ROOMS)} rooms made; day 1 is {_clock(notes.day_one_us)[:10]}")


def _make_people(notes: DemoNotes) -> dict[str, Person]:
    people: dict[str, Person] = {}
    for plan in PEOPLE:
        notes.passwords[plan.login] = secrets.token_urlsafe(9)
        person = add_person(plan.login, plan.role, by=people.get(MANAGER), password=notes.passwords[plan.login],
                            email=f"{plan.login}@skerry.example")
        person.first_name, person.last_name = plan.first_name, plan.last_name
        person.save(update_fields=["first_name", "last_name"])
        people[plan.login] = person
    return people


def _name_guests(people: dict[str, Person], notes: DemoNotes) -> None:
    for plan in PEOPLE:
        if plan.guest_bench and plan.guest_until_s is not None:
            stations = Station.objects.filter(name=bench_named(plan.guest_bench).station)
            until = at_of(notes.day_one_us + round(plan.guest_until_s * 1e6))
            set_guest(people[plan.login], list(stations), until, by=people[MANAGER])


def _put_on_call(people: dict[str, Person], now: datetime) -> None:
    """This week and the next three, in turn, from Monday 08:00 UTC."""
    since_monday = timedelta(days=now.weekday(), hours=now.hour, minutes=now.minute, seconds=now.second)
    monday = now - since_monday + timedelta(hours=8)
    monday -= timedelta(weeks=1) if monday > now else timedelta(0)
    for week, name in enumerate((TECHNICIAN, RESEARCHER, STUDENT, TECHNICIAN)):
        start = monday + timedelta(weeks=week)
        put_on_call(people[name], start, start + timedelta(weeks=1), by=people[MANAGER])


def _make_room(room: RoomPlan, notes: DemoNotes, people: dict[str, Person]) -> None:
    wish = TapWish(CLIMATE_TAP, TapKind.CLIMATE, interval_s=CLIMATE_CADENCE_S)
    _, notes.station_keys[room.station] = add_bench(room.station, taps=[wish], room=room.name, owner=people[TECHNICIAN],
                                                    purpose=f"Climate of {room.name}", by=people[MANAGER])


def _make_bench(bench: BenchPlan, notes: DemoNotes, people: dict[str, Person]) -> None:
    kind = TapKind.STOKES if isinstance(bench.head, Polarimeter) else TapKind.TWO_PORT
    station, notes.station_keys[bench.station] = add_bench(
        bench.station, taps=[TapWish(bench.tap, kind, bench.head.unit)], room=bench.room, owner=people[bench.owner],
        purpose=bench.experiment, by=people[MANAGER])
    set_shared(station, room=bench.room, laser=bench.laser, logger="", network="", by=people[MANAGER], reason="as it is built")
    tap = station.taps.get()
    day_one = at_of(notes.day_one_us)
    _calibrate(bench, tap, notes, people)
    experiment = create_experiment(bench.experiment, [tap], by=people[MANAGER], owner=people[bench.experiment_owner])
    set_limit(experiment, tap, bench.limit.quantity, alarm=bench.limit.alarm, warning=bench.limit.warning,
              deadband=bench.limit.deadband, valid_from=day_one, by=people[MANAGER], reason="working limit of this use")


def _calibrate(bench: BenchPlan, tap: Tap, notes: DemoNotes, people: dict[str, Person]) -> None:
    """The calibration of day 1; a polarimeter whose sign flipped got a second one from that moment on."""
    set_calibration(tap, at_of(notes.day_one_us), calibration_of(bench), by=people[TECHNICIAN], reason="taken on day 1")
    for flip in LEDGER.of(HandednessFlipped, bench.name):
        set_calibration(tap, at_of(notes.day_one_us + round(flip.start_s * 1e6)), {"handedness": "ieee"}, by=people[TECHNICIAN],
                        reason="logger reinstalled: it now counts the other sense of rotation as positive")


def calibration_of(bench: BenchPlan) -> dict[str, object]:
    """Zeros, floors and settings of a bench as its people measured them, in the tap's raw unit."""
    head = bench.head
    if isinstance(head, Polarimeter):
        return {"wanted_state": [float(part) for part in wanted_state(bench)], "handedness": "optics",
                "floor1": head.noise * head.units_per_w * bench.power_w}
    return {"zero1": head.zero1, "zero2": head.zero2, "floor1": head.noise1, "floor2": head.noise2, "gain_ratio": head.gain_ratio,
            "saturation1": head.top, "saturation2": head.top, "leakage": [list(row) for row in head.leakage], "wanted_port": 1}


def _renew_access(notes: DemoNotes, progress: Say) -> None:
    """The lab is in the database but its notes are gone: new keys and passwords."""
    for station in Station.objects.filter(name__in=[bench.station for bench in BENCHES] + [room.station for room in ROOMS]):
        notes.station_keys[station.name] = make_key(station)
    for plan in PEOPLE:
        notes.passwords[plan.login] = secrets.token_urlsafe(9)
        set_password(Person.objects.get(username=plan.login), notes.passwords[plan.login], by=None)
    notes.built_until_us, notes.is_built = now_us(), True
    write_notes(notes)
    progress("the demo laboratory is there, its notes were lost: new keys and passwords made")


def _login(notes: DemoNotes) -> DemoLogin:
    password = notes.passwords[MANAGER]
    manager = next(plan for plan in PEOPLE if plan.login == MANAGER)
    others = ", ".join(f"{plan.login} ({plan.role})" for plan in PEOPLE if plan.login != MANAGER)
    return DemoLogin(MANAGER, password, [
        f"Sign in as {MANAGER} with the password {password} ({manager.first_name} {manager.last_name}, lab manager).",
        f"Others: {others}; their passwords are in demo/notes.json of the data folder. All are invented, for this demo only.",
        "About 90 s after the start the fibre of bench N4 is touched; its alarm rises a minute later."])


def _clock(us: int) -> str:
    return at_of(us).strftime("%Y-%m-%d %H:%M UTC")
