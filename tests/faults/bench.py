"""Benches of a running lab, made and read back through the doors that people use: commands and the HTTP API."""

import json
import time
import urllib.request
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any

import psycopg

from tests.faults.course import ANGLE_LIMIT, DURATION_S, ER_LIMIT, Course, stokes_course, two_port_course
from tests.faults.sender import HonestSender
from tests.running_lab import RunningLab, manage, until_true

QUIET_WITHIN_S = 90.0
#: Until when a run must be through, kills included.
LONGEST_RUN_S = DURATION_S + 60.0


class Visitor:
    """A person at the API of a running lab."""

    def __init__(self, lab: RunningLab, key: str) -> None:
        self.lab, self.key = lab, key

    def call(self, method: str, path: str, body: Any = None) -> Any:
        """The answer's JSON; a fault of the call is the test's fault."""
        request = urllib.request.Request(f"http://127.0.0.1:{self.lab.port}/api/v1/{path}", method=method,
                                         data=None if body is None else json.dumps(body).encode(),
                                         headers={"Authorization": f"Bearer {self.key}", "Content-Type": "application/json"})
        with urllib.request.urlopen(request, timeout=30) as answer:
            return json.load(answer)


def visitor_of(lab: RunningLab, name: str = "watcher") -> Visitor:
    """A new manager of a running lab."""
    return Visitor(lab, json.loads(manage("add_person", name, "--role", "manager", folder=lab.folder))["key"])


@dataclass(frozen=True, slots=True)
class Tap:
    """One tap of a station of its own, with its limit in an experiment."""

    station: str
    name: str
    key: str
    experiment: int
    course: Course

    @property
    def path(self) -> str:
        return f"{self.station}/{self.name}"


@dataclass(frozen=True, slots=True)
class Told:
    """What the lab has of a tap: readings (boot, sequence, µs, raw values) and standing episodes, seconds from the start."""

    readings: list[tuple[Any, ...]]
    episodes: list[tuple[Any, ...]]


def make_taps(visitor: Visitor, name: str, courses: tuple[Course, Course] | None = None, interval_s: float = 0.25) -> list[Tap]:
    """Two stations, one with a two-port tap and one with a Stokes tap, each watched; the usual course, or others."""
    folder = visitor.lab.folder
    first, second = courses or (two_port_course(1), stokes_course(2))
    made = []
    for station, tap, option, unit, limit, course in ((f"{name}-a", "in", "--two-port", "mW", ER_LIMIT, first),
                                                      (f"{name}-b", "out", "--stokes", "uW", ANGLE_LIMIT, second)):
        words = ["add_station", station, option, f"{tap}={unit}", "--interval-s", f"{tap}={interval_s}"]
        key = json.loads(manage(*words, folder=folder))["key"]
        if option == "--stokes":
            since = (datetime.now(UTC) - timedelta(days=2)).isoformat()
            visitor.call("PATCH", f"taps/{station}/{tap}/calibration", {"valid_from": since, "wanted_state": [1.0, 0.0, 0.0]})
        experiment = visitor.call("POST", "experiments", {"name": f"{station} watch", "taps": [f"{station}/{tap}"]})["id"]
        visitor.call("POST", f"experiments/{experiment}/limits", {"tap": f"{station}/{tap}"} | limit)
        made.append(Tap(station, tap, key, experiment, course))
    return made


def start_senders(lab: RunningLab, taps: list[Tap], *, seed: int, started_us: int | None = None, port: int | None = None,
                  **habits: Any) -> list[HonestSender]:
    """One sender a tap, all from the same whole second, a second from now where no other start of the course is given."""
    started_us = started_us or (time.time_ns() // 1_000_000_000 + 1) * 1_000_000
    senders = [HonestSender(port=port or lab.port, key=tap.key, tap=tap.name, course=tap.course, started_us=started_us,
                            seed=seed + number, **habits) for number, tap in enumerate(taps)]
    for sender in senders:
        sender.start()
    return senders


def await_all_sent(senders: list[HonestSender], within_s: float) -> None:
    """Wait until every reading is acknowledged.

    Raises:
        AssertionError: A sender met an answer that it could not foresee, or is not done in time.
    """
    until_s = time.monotonic() + within_s
    for sender in senders:
        sender.join(max(until_s - time.monotonic(), 0.1))
        assert sender.tally.unforeseen == []
        assert not sender.is_alive(), f"{sender.name}: {len(sender.waiting)} readings wait after {within_s} s"


def await_judged(lab: RunningLab) -> float:
    """Wait until nothing is marked for judgement and every last second counts as complete; seconds it took."""
    began_s = time.monotonic()
    assert until_true(lambda: is_judged(lab), QUIET_WITHIN_S), f"readings are still to be judged after {QUIET_WITHIN_S} s"
    return time.monotonic() - began_s


def is_judged(lab: RunningLab) -> bool:
    """True where no mark waits."""
    try:
        with psycopg.connect(lab.services["database_url"], connect_timeout=5) as database:
            return database.execute("SELECT (SELECT count(*) FROM ingest_touch) "
                                    "+ (SELECT count(*) FROM analysis_tapnow WHERE open_until_us IS NOT NULL)").fetchone() == (0,)
    except psycopg.OperationalError:
        return False


def expected_readings(sender: HonestSender) -> list[tuple[Any, ...]]:
    """What the sender made, in order."""
    columns = [values.tolist() for values in sender.course.columns.values()]
    return [(sender.boot, number, sender.started_us + int(after_us), *values)
            for number, (after_us, *values) in enumerate(zip(sender.course.after_us.tolist(), *columns, strict=True))]


def told_of(visitor: Visitor, tap: Tap, sender: HonestSender) -> Told:
    """Readings and episodes as a notebook sees them."""
    start = datetime.fromtimestamp(sender.started_us / 1e6, UTC)
    span = f"{(start - timedelta(hours=1)).isoformat()}/{(start + timedelta(hours=1)).isoformat()}".replace("+00:00", "Z")
    table = visitor.call("GET", f"taps/{tap.path}/readings?span={span}&format=json")
    names = [next(name for name in table["readings"][0] if name in {f"raw_{column}", f"raw_{column}_{table['unit']}"})
             for column in tap.course.columns]
    readings = [(row["boot"], row["sequence"], _us(row["at"]), *(row[name] for name in names)) for row in table["readings"]]
    alarms = visitor.call("GET", f"alarms?experiment={tap.experiment}")["alarms"]
    episodes = sorted((*(_after_s(one[name], sender) for name in ("raised_at", "alarm_at", "returned_at")), one["level"],
                       round(one["value"], 9))
                      for one in alarms if one["kind"] == "limit" and not one["is_withdrawn"])
    return Told(readings, episodes)


def _us(text: str) -> int:
    return round(datetime.fromisoformat(text).timestamp() * 1e6)


def _after_s(text: str | None, sender: HonestSender) -> float | None:
    return None if text is None else round((_us(text) - sender.started_us) / 1e6, 6)
