"""Who may use each address: written out by hand from CONTRACT section 5, never read from the code.

A new page or call fails test_matrix.py until it has its row here; the failure says what to write.
"""

from dataclasses import dataclass, field
from enum import StrEnum
from typing import Any


class Who(StrEnum):
    """Everyone who may come to an address about bench-a. The guest has bench-a named for them, the neighbour owns bench-b."""

    GUEST = "guest"
    RESEARCHER = "researcher"
    NEIGHBOUR = "neighbour"
    OWNER = "owner"
    MANAGER = "manager"


@dataclass(frozen=True, slots=True)
class Rule:
    """Who gets in. ``send`` is what a write must carry to reach the question of rights; names in it are those of lab.py.

    ``is_open``: without sign-in. ``is_own``: about the caller's own row; everyone gets in to theirs, nobody to others'.
    """

    who: frozenset[Who]
    send: dict[str, Any] = field(default_factory=dict)
    is_open: bool = False
    is_own: bool = False


def all_of(*who: Who, **more: Any) -> Rule:
    """A rule for these."""
    return Rule(frozenset(who), **more)


def sending(rule: Rule, **send: Any) -> Rule:
    """The same rule for a write that must carry something."""
    return Rule(rule.who, send)


OPEN = all_of(*Who, is_open=True)
READ = all_of(*Who)                                                # guests: named benches only
OWN_ROW = all_of(*Who, is_own=True)
WORK = all_of(Who.RESEARCHER, Who.NEIGHBOUR, Who.OWNER, Who.MANAGER)   # acknowledge, shelve, log, plan
OWN_BENCH = all_of(Who.OWNER, Who.MANAGER)                         # limits, zeros, keys, files of own benches
ANY_OWNER = all_of(Who.NEIGHBOUR, Who.OWNER, Who.MANAGER)          # what an owner may begin on a bench of their own
LAB = all_of(Who.MANAGER)                                          # people, stations, floors, health

#: Pages by the name of their address: what each method is for.
PAGES: dict[str, dict[str, Rule]] = {
    "lab": {"GET": READ},
    "lab-json": {"GET": READ},
    "join": {"GET": LAB, "POST": LAB},
    "login": {"GET": OPEN, "POST": OPEN},
    "logout": {"POST": OPEN},
    "you": {"GET": READ, "POST": READ},
    "make-own-key": {"POST": READ},
    "revoke-own-key": {"POST": OWN_ROW},
    "station": {"GET": READ},
    "set-aside": {"GET": READ},
    "imports": {"GET": OWN_BENCH, "POST": OWN_BENCH},
    "import-file": {"GET": OWN_BENCH, "POST": OWN_BENCH},
    "make-key": {"POST": OWN_BENCH},
    "revoke-key": {"POST": OWN_BENCH},
    "joining": {"GET": OWN_BENCH},
    "add-tap": {"POST": OWN_BENCH},
    "history-json": {"GET": READ},
    "trail-json": {"GET": READ},
    "calibration": {"GET": OWN_BENCH, "POST": OWN_BENCH},
    "gain": {"GET": OWN_BENCH, "POST": OWN_BENCH},
    "leakage": {"GET": OWN_BENCH, "POST": OWN_BENCH},
    "zero": {"GET": OWN_BENCH, "POST": OWN_BENCH},
    "answer-doubts": {"POST": OWN_BENCH},
    "log": {"GET": READ, "POST": WORK},
    "touched": {"POST": WORK},
    "log-entry": {"GET": READ, "POST": OWN_BENCH},                 # the row of lab.py was written by its owner
    "say-change": {"POST": OWN_BENCH},
    "strike-entry": {"POST": OWN_BENCH},
    "log-picture": {"GET": READ},
    "alarms": {"GET": READ},
    "acknowledge": {"POST": WORK},
    "shelve": {"POST": WORK},
    "end-hold": {"POST": WORK},
    "quiet": {"POST": sending(WORK, what="{tap_id}::", for_s="1800", reason="x")},
    "telling": {"GET": READ, "POST": READ},
    "add-device": {"POST": READ},
    "end-device": {"POST": OWN_ROW},
    "set-digest": {"POST": READ},
    "trial": {"POST": READ},
    "notify-worker": {"GET": OPEN},
    "event": {"GET": READ},
    "take-event": {"POST": WORK},
    "calls": {"GET": WORK, "POST": LAB},
    "off-call": {"POST": LAB},
    "call-rules": {"POST": LAB},
    "new-webhook": {"POST": LAB},
    "no-webhook": {"POST": LAB},
    "drills": {"GET": LAB, "POST": LAB},
    "shared": {"GET": OWN_BENCH, "POST": OWN_BENCH},
    "experiments": {"GET": READ},
    "new-experiment": {"GET": ANY_OWNER, "POST": ANY_OWNER},
    "experiment": {"GET": READ},
    "set-limit": {"POST": OWN_BENCH},
    "rehearse-limit": {"POST": OWN_BENCH},
    "retire-limit": {"POST": OWN_BENCH},
    "ask-limit": {"POST": OWN_BENCH},
    "ask-retire": {"POST": OWN_BENCH},
    "decide-limit-request": {"POST": OWN_BENCH},
    "floors": {"GET": READ, "POST": LAB},
    "runs": {"GET": READ},
    "run": {"GET": READ},
    "new-run": {"GET": WORK, "POST": WORK},
    "change-run": {"GET": OWN_BENCH, "POST": OWN_BENCH},           # own runs: the row of lab.py is its owner's
    "end-run": {"POST": OWN_BENCH},
    "new-ledger": {"POST": OWN_BENCH},
    "ledger-csv": {"GET": READ},
    "clearance-page": {"GET": READ},
    "experiment-back-test": {"GET": READ},
    "back-test": {"GET": READ},
    "ask-for-back-test": {"POST": WORK},
    "keeping": {"GET": LAB, "POST": LAB},
    "call-review": {"GET": WORK},
    "overnight": {"GET": READ},
    "evidence": {"GET": WORK, "POST": WORK},                       # taken out of the lab: the audit keeps by whom
    "evidence-zip": {"GET": WORK},
    "evidence-report": {"GET": WORK},
    "evidence-pdf": {"GET": WORK},
    "audit": {"GET": ANY_OWNER},
    "audit-export": {"GET": sending(ANY_OWNER, format="csv")},
    "health": {"GET": LAB},
    "people": {"GET": LAB, "POST": LAB},
    "set-role": {"POST": LAB},
    "end-access": {"GET": LAB, "POST": LAB},
}

_LIMIT = {"tap": "bench-{bench}/in", "quantity": "er_db", "alarm": 20.0}
#: API calls by method and path of the OpenAPI document.
CALLS: dict[str, Rule] = {
    "GET /api/v1/stations": READ,
    "GET /api/v1/taps/{station}/{tap}/now": READ,
    "GET /api/v1/taps/{station}/{tap}/history": READ,
    "GET /api/v1/taps/{station}/{tap}/statistics": READ,
    "GET /api/v1/taps/{station}/{tap}/readings": READ,
    "PATCH /api/v1/taps/{station}/{tap}/calibration": OWN_BENCH,
    "POST /api/v1/taps/{station}/{tap}/holds": sending(WORK, kind="shelved", reason="x", for_s=60),
    "GET /api/v1/experiments": READ,
    "POST /api/v1/experiments": sending(OWN_BENCH, name="x", taps=["bench-{bench}/in"]),
    "GET /api/v1/experiments/{id}/limits": READ,
    "POST /api/v1/experiments/{id}/limits": sending(OWN_BENCH, **_LIMIT),
    "POST /api/v1/experiments/{id}/limits/rehearse": sending(READ, **_LIMIT),   # writes nothing
    "GET /api/v1/experiments/{id}/limits/requests": READ,
    "POST /api/v1/experiments/{id}/limits/requests": sending(OWN_BENCH, **_LIMIT),
    "POST /api/v1/limit-requests/{id}/grant": LAB,                  # the row of lab.py was asked for by its owner:
    "POST /api/v1/limit-requests/{id}/refuse": LAB,                 # a second person decides,
    "POST /api/v1/limit-requests/{id}/withdraw": all_of(Who.OWNER),  # and who asked may take it back
    "GET /api/v1/experiments/{id}/clearance": READ,
    "GET /api/v1/runs/{id}/clearance": READ,
    "GET /api/v1/floors": READ,
    "POST /api/v1/stations/{station}/floors": sending(LAB, quantity="er_db", value=15.0, reason="x"),
    "GET /api/v1/alarms": READ,
    "POST /api/v1/alarms/{id}/acknowledge": WORK,
    "POST /api/v1/alarms/{id}/shelve": sending(WORK, reason="x", for_s=60),
    "POST /api/v1/alarms/{id}/unshelve": WORK,
    "GET /api/v1/events": READ,
    "GET /api/v1/events/{id}": READ,
    "POST /api/v1/events/{id}/acknowledge": WORK,
    "PATCH /api/v1/stations/{station}": sending(OWN_BENCH, laser="Beacon"),
    "GET /api/v1/holds": READ,
    "POST /api/v1/holds/{id}/end": WORK,
    "GET /api/v1/stations/{station}/log": READ,
    "POST /api/v1/stations/{station}/log": sending(WORK, text="x"),
    "PATCH /api/v1/log/{id}": sending(OWN_BENCH, text="x"),
    "POST /api/v1/log/{id}/change": sending(OWN_BENCH, configuration_change=None),
    "POST /api/v1/log/{id}/strike": OWN_BENCH,
    "GET /api/v1/runs": READ,
    "POST /api/v1/runs": sending(WORK, experiment="experiment {bench}", name="x", starts_at="2032-01-01T20:00:00Z", length_s=60),
    "GET /api/v1/runs/{id}": READ,
    "PATCH /api/v1/runs/{id}": OWN_BENCH,                          # own runs: the row of lab.py is its owner's
    "POST /api/v1/runs/{id}/stop": OWN_BENCH,
    "POST /api/v1/runs/{id}/cancel": OWN_BENCH,
    "GET /api/v1/runs/{id}/ledger": READ,
    "POST /api/v1/runs/{id}/ledger": sending(OWN_BENCH, reason="x"),
    "GET /api/v1/runs/{id}/ledger/change": READ,
    "GET /api/v1/audit": ANY_OWNER,
    "GET /api/v1/audit/export": ANY_OWNER,
    "GET /api/v1/openapi.json": OPEN,
    "GET /health/process": OPEN,
    "GET /health/services": OPEN,
}
#: Not for people: a station key opens it, and no session or person's key (tests/ingest/door).
STATION_DOOR = {"POST /api/v1/readings"}
