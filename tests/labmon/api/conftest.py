"""A small lab for the API's tests: one bench with an owner, a bench that no guest sees, people of every role."""

import json
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest
from django.http import HttpResponse
from django.test import Client
from openapi_schema_validator import OAS31Validator
from referencing import Registry
from referencing.jsonschema import DRAFT202012

from ingest.models import Tap, TapKind
from ingest.store.append import write_blocks
from labmon.api.openapi import document
from labmon.experiments.models import Experiment
from labmon.people.keys import make_person_key
from labmon.people.models import Person, Role
from labmon.pipeline.catch_up import catch_up
from tests.factories import NOON_US, make_experiment, make_person, make_station, make_tap

SECOND_US = 1_000_000
PROBLEM = "application/problem+json"


@dataclass(frozen=True, slots=True)
class Caller:
    """Calls the API with someone's key and holds each answer against the OpenAPI document."""

    key: str = ""
    client: Client = field(default_factory=lambda: Client(enforce_csrf_checks=True))

    def get(self, address: str, **query: Any) -> HttpResponse:
        return self._sent(self.client.get(address, query, headers=self._headers()), "get", address)

    def post(self, address: str, body: Any = None) -> HttpResponse:
        return self._written("post", address, body)

    def patch(self, address: str, body: Any) -> HttpResponse:
        return self._written("patch", address, body)

    def _written(self, method: str, address: str, body: Any) -> HttpResponse:
        sent = "" if body is None else body if isinstance(body, (str, bytes)) else json.dumps(body)
        call = getattr(self.client, method)
        return self._sent(call(address, sent, content_type="application/json", headers=self._headers()), method, address)

    def _headers(self) -> dict[str, str]:
        return {"authorization": f"Bearer {self.key}"} if self.key else {}

    @staticmethod
    def _sent(answer: HttpResponse, method: str, address: str) -> HttpResponse:
        assert answer.status_code < 500 or answer.status_code == 503
        if not answer.streaming and address.startswith(("/api/v1/", "/health/")):
            holds_to_document(answer, method, address)
        return answer


def holds_to_document(answer: HttpResponse, method: str, address: str) -> None:
    """The status is described for the call, and the body has the described shape; JSON is strict."""
    said = json.loads(answer.content, parse_constant=pytest.fail)
    operation = operation_at(method, address)
    if operation is None:
        assert answer.status_code in {404, 405}
        shape = {"$ref": "#/components/schemas/Problem"}
    else:
        shape = operation["responses"][str(answer.status_code)]["content"][answer.headers["Content-Type"]]["schema"]
    if answer.status_code >= 400:
        assert answer.headers["Content-Type"] == PROBLEM and said["status"] == answer.status_code and said["detail"]
    faults = [f"{list(fault.absolute_path)}: {fault.message}" for fault in validator(shape).iter_errors(said)]
    assert not faults, faults


def validator(shape: dict[str, Any]) -> OAS31Validator:
    """Checks against a shape of the document; a member that the document does not name is a fault."""
    whole = DRAFT202012.create_resource(document())
    registry = Registry().with_resource("labmon:document", whole)
    absolute = json.loads(json.dumps(shape).replace('"#/', '"labmon:document#/'))
    return OAS31Validator(absolute, registry=registry, format_checker=OAS31Validator.FORMAT_CHECKER)


def operation_at(method: str, address: str) -> dict[str, Any] | None:
    """The described operation of an address, if there is one."""
    parts = address.split("?")[0].split("/")
    for path, operations in document()["paths"].items():
        pattern = path.split("/")
        if len(pattern) == len(parts) and all(want in (part, "{station}", "{tap}", "{id}")
                                              for want, part in zip(pattern, parts, strict=True)):
            return operations.get(method)
    return None


@dataclass(frozen=True, slots=True)
class Lab:
    """The lab's rows, and a caller for each role."""

    people: dict[str, Person]
    manager: Caller
    owner: Caller
    stranger: Caller
    """An owner, but of no bench here."""
    researcher: Caller
    guest: Caller
    nobody: Caller
    tap: Tap
    stokes: Tap
    climate: Tap
    hidden: Tap
    experiment: Experiment


@pytest.fixture
def lab(db) -> Lab:
    """Bench a of the owner with three taps, 120 readings each from noon on; bench b, which the guest does not see."""
    people = {role.value: make_person(role, username=role.value) for role in Role}
    people["stranger"] = make_person(Role.OWNER, username="stranger")
    callers = {name: Caller(make_person_key(person, by=None)[1]) for name, person in people.items()}
    bench, other = make_station("bench-a", owner=people["owner"], room="room 1"), make_station("bench-b")
    people["guest"].guest_stations.add(bench)
    rows = {"tap": make_tap(bench, "in"), "stokes": make_tap(bench, "sop", kind=TapKind.STOKES),
            "climate": make_tap(bench, "air", kind=TapKind.CLIMATE), "hidden": make_tap(other, "in")}
    experiment = make_experiment(rows["tap"], rows["stokes"], owner=people["owner"], name="trap loading")
    return Lab(people, experiment=experiment, nobody=Caller(), **callers, **rows)


@pytest.fixture
def read_lab(lab) -> Lab:
    """The lab with two minutes of readings, reduced and rolled up."""
    write(lab.tap, port1=np.full(120, 1e-3), port2=np.full(120, 1e-5))
    write(lab.stokes, s0=np.full(120, 1e-3), s1=np.full(120, 0.98e-3), s2=np.zeros(120), s3=np.full(120, 1e-4))
    write(lab.climate, temperature_c=np.linspace(21.0, 22.0, 120), humidity_pct=np.full(120, 40.0))
    catch_up(NOON_US + 121 * SECOND_US)
    return lab


def write(tap: Tap, *, from_us: int = NOON_US, step_us: int = SECOND_US, boot: str = "boot-1", **columns: np.ndarray) -> None:
    """Readings of a tap, one a step."""
    count = len(next(iter(columns.values())))
    at_us = from_us + step_us * np.arange(count)
    write_blocks(tap, at_us, columns, boot=boot, sequence=np.arange(count), arrival_us=at_us)
