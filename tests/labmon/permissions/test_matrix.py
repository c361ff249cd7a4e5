"""Every page and every API call × everyone who may come: who gets in is who should, by rules.py; the rest changes nothing.

The addresses come from the URL configuration and the calls from the OpenAPI document, so a new one without a rule fails.
"""

import json
import re
from collections.abc import Iterator
from contextlib import contextmanager
from functools import cache
from typing import Any

import pytest
from django.db import transaction
from django.test import Client
from django.urls import URLPattern, get_resolver, reverse

from labmon.api.openapi import document
from labmon.audit.models import AuditEntry
from labmon.people.keys import make_person_key
from labmon.people.models import Person
from tests.labmon.permissions.lab import IDS, MatrixLab, build, own_row
from tests.labmon.permissions.rules import CALLS, PAGES, STATION_DOOR, Rule, Who

pytestmark = pytest.mark.django_db
METHODS = ("GET", "POST", "PUT", "PATCH", "DELETE")
HERE = "tests/labmon/permissions"


@cache
def page_patterns() -> dict[str, URLPattern]:
    """Every address that is not an API call, by its name."""
    found: dict[str, URLPattern] = {}
    for one in get_resolver().url_patterns:
        if not hasattr(one, "url_patterns"):
            found[one.name or str(one.pattern)] = one
        elif not getattr(one, "app_name", None):
            found |= {inner.name or str(inner.pattern): inner for inner in one.url_patterns}
    return found


def described_calls() -> list[str]:
    """Every API call, as ``GET /api/v1/stations``."""
    said = {f"{method.upper()} {path}" for path, operations in document()["paths"].items() for method in operations}
    return sorted(said - STATION_DOOR)


@pytest.fixture
def lab(settings, tmp_path) -> MatrixLab:
    settings.MEDIA_ROOT = tmp_path
    return build()


@contextmanager
def undone() -> Iterator[None]:
    """What is written inside is taken back, so that each caller finds the same lab."""
    mark = transaction.savepoint()
    try:
        yield
    finally:
        transaction.savepoint_rollback(mark)


def filled(value: Any, rows: dict[str, Any]) -> Any:
    """What a rule sends, with the bench's own names in it."""
    if isinstance(value, dict):
        return {name: filled(one, rows) for name, one in value.items()}
    if isinstance(value, list):
        return [filled(one, rows) for one in value]
    return value.format(**{name: one for name, one in rows.items() if "." not in name}) if isinstance(value, str) else value


# Pages


def test_every_page_has_its_rule_and_every_rule_its_page():
    missing, gone = set(page_patterns()) - set(PAGES), set(PAGES) - set(page_patterns())
    assert not missing, (
        f'Pages without a rule: {sorted(missing)}. Write for each in {HERE}/rules.py, PAGES, who may use which method, such as\n'
        f'    "{min(missing)}": {{"GET": READ, "POST": OWN_BENCH}},\n'
        "READ: all (guests: named benches); WORK: all but guests; OWN_BENCH: the bench's owner and managers; "
        "ANY_OWNER: any owner; LAB: managers.")
    assert not gone, f"Rules without a page: {sorted(gone)}. Take them out of {HERE}/rules.py."


def address_of(name: str, rows: dict[str, Any], person: Person | None = None) -> str:
    """The page about a bench's rows; about own rows that of ``person``."""
    wanted = page_patterns()[name].pattern.converters
    if any(rule.is_own for rule in PAGES[name].values()):
        return reverse(name, kwargs=own_row(name, person))
    missing = [one for one in wanted if f"{name}.{one}" not in rows and one not in rows]
    assert not missing, (
        f"The address of {name!r} needs {missing}: make such a row in _bench() of {HERE}/lab.py and return its number as "
        f"{missing[0]!r} (or as '{name}.{missing[0]}' where the name means something else elsewhere).")
    return reverse(name, kwargs={one: rows.get(f"{name}.{one}", rows.get(one)) for one in wanted})


def is_about_a_bench(name: str) -> bool:
    return bool(page_patterns()[name].pattern.converters) and "person_id" not in page_patterns()[name].pattern.converters


def asked(person: Person | None, method: str, address: str, send: dict[str, Any]) -> Any:
    client = Client()
    if person is not None:
        client.force_login(person)
    if method == "GET":
        return client.get(address, send)
    if method == "POST":
        return client.post(address, send)
    return client.generic(method, address)


def is_let_in(answer: Any) -> bool:
    """Got to what the page is for: an answer, a form with its faults, or a way on; never the way to sign in."""
    location = answer.headers.get("Location", "")
    return answer.status_code in {200, 201, 302, 303, 400, 409, 422} and not location.startswith("/login")


@pytest.mark.parametrize("name", sorted(PAGES))
def test_page(lab, name):
    """Each method of a page: those who may get in, the others 403 (404 where they do not see the bench), nothing is written."""
    if name not in page_patterns():
        pytest.skip("the test above tells of it")
    for method in METHODS:
        rule = PAGES[name].get(method)
        if rule is None:
            with undone():
                manager = lab.people[Who.MANAGER]
                answer = asked(manager, method, address_of(name, lab.rows["a"], manager), {})
            assert answer.status_code == 405, (
                f"{name} answers {method} with {answer.status_code}, and no rule says who may. Refuse the method "
                f"(require_safe, require_POST), or write its rule in {HERE}/rules.py.")
        elif not rule.is_open:
            _check_page(lab, name, method, rule)


def _check_page(lab: MatrixLab, name: str, method: str, rule: Rule) -> None:
    send = {letter: filled(rule.send, rows) for letter, rows in lab.rows.items()}
    for who, person in lab.people.items():
        with undone():
            address = address_of(name, lab.rows["a"], person)
            before = AuditEntry.objects.count()
            answer = asked(person, method, address, send["a"])
            said = f"{method} {name}, {who} on bench-a: {answer.status_code}"
            if who in rule.who:
                assert is_let_in(answer), f"{said}, and should be let in"
            else:
                assert answer.status_code == 403, f"{said}, and should be refused with 403"
                assert AuditEntry.objects.count() == before, f"{said}, and something was written"
    _check_strangers(lab, name, method, rule, send)


def _check_strangers(lab: MatrixLab, name: str, method: str, rule: Rule, send: dict[str, Any]) -> None:
    owner, guest = lab.people[Who.OWNER], lab.people[Who.GUEST]
    if rule.is_own:
        with undone():
            assert asked(owner, method, address_of(name, {}, guest), {}).status_code == 404, f"{name}: another's own row"
    elif is_about_a_bench(name):
        with undone():
            answer = asked(guest, method, address_of(name, lab.rows["b"]), send["b"])
            assert answer.status_code == 404, f"{method} {name}, guest on bench-b: {answer.status_code}, and should be 404"
        with undone():
            answer = asked(owner, method, address_of(name, lab.rows["b"]), send["b"])
            assert is_let_in(answer) is (Who.NEIGHBOUR in rule.who), f"{method} {name}, owner of bench-a on bench-b"
    for nobody in (None, lab.ended, lab.expired):
        with undone():
            address = address_of(name, lab.rows["a"], owner)
            before = AuditEntry.objects.count()
            answer = asked(nobody, method, address, send["a"])
            assert not is_let_in(answer) and answer.status_code in {302, 403}, f"{method} {name}, {nobody}: {answer.status_code}"
            assert AuditEntry.objects.count() == before


@pytest.mark.parametrize("name", sorted(name for name, rules in PAGES.items() if "POST" in rules and name != "login"))
def test_no_page_takes_a_write_without_its_token(lab, name):
    """CSRF: a form of another site, sent by a manager's browser."""
    if name not in page_patterns():
        pytest.skip("another test tells of it")
    manager = lab.people[Who.MANAGER]
    client = Client(enforce_csrf_checks=True)
    client.force_login(manager)
    before = AuditEntry.objects.count()
    address = address_of(name, lab.rows["a"], manager)
    made = AuditEntry.objects.count() - before
    assert client.post(address, filled(PAGES[name]["POST"].send, lab.rows["a"])).status_code == 403
    assert AuditEntry.objects.count() == before + made


# The API


def test_every_call_has_its_rule_and_every_rule_its_call():
    missing, gone = set(described_calls()) - set(CALLS), set(CALLS) - set(described_calls())
    assert not missing, (
        f'Calls without a rule: {sorted(missing)}. Write for each in {HERE}/rules.py, CALLS, who may make it, such as\n'
        f'    "{min(missing)}": OWN_BENCH,\n'
        "(READ, WORK, OWN_BENCH, ANY_OWNER, LAB; sending(RULE, field=…) where the question of rights comes after the body).")
    assert not gone, f"Rules without a call: {sorted(gone)}. Take them out of {HERE}/rules.py."


SPAN = "?span=2031-03-04T12:00:00Z/PT1M"
WANT_SPAN = ("/history", "/statistics", "/readings")


def call_address(call: str, rows: dict[str, Any]) -> str:
    path = call.partition(" ")[2]
    for word in re.findall(r"([\w-]+)/{id}", path):
        assert word in IDS, f"{call}: say in {HERE}/lab.py, IDS, what the number behind {word!r} is, such as 'run_id'"
        assert IDS[word] in rows, f"{call}: make such a row in _bench() of {HERE}/lab.py and return its number as {IDS[word]!r}"
        path = path.replace(f"{word}/{{id}}", f"{word}/{rows[IDS[word]]}")
    path = path.format(**{name: one for name, one in rows.items() if "." not in name and "-" not in name})
    return path + (SPAN if path.endswith(WANT_SPAN) else "")


def called(key: str, call: str, rows: dict[str, Any], send: dict[str, Any]) -> Any:
    headers = {"authorization": f"Bearer {key}"} if key else {}
    method, address = call.partition(" ")[0], call_address(call, rows)
    body = "" if method == "GET" else json.dumps(filled(send, rows))
    answer = Client().generic(method, address, body, content_type="application/json", headers=headers)
    if answer.streaming:
        b"".join(answer.streaming_content)
    return answer


@pytest.mark.parametrize("call", sorted(CALLS))
def test_call(lab, call):
    """Each API call by person's key: those who may get in, others 403 (404 where they do not see the bench), nobody 401."""
    if call not in described_calls():
        pytest.skip("the test above tells of it")
    rule = CALLS[call]
    if rule.is_open:
        assert called("", call, lab.rows["a"], {}).status_code == 200
        return
    for who, person in lab.people.items():
        key = make_person_key(person, by=None)[1]
        with undone():
            before = AuditEntry.objects.count()
            answer = called(key, call, lab.rows["a"], rule.send)
            said = f"{call}, {who} on bench-a: {answer.status_code}"
            if who in rule.who:
                assert answer.status_code in {200, 201, 202, 400, 409}, f"{said}, and should be let in"
            else:
                assert answer.status_code == 403, f"{said}, and should be refused with 403: {answer.content[:300]}"
                assert AuditEntry.objects.count() == before, f"{said}, and something was written"
    if "{" in call or "bench-{bench}" in json.dumps(rule.send):
        with undone():
            answer = called(make_person_key(lab.people[Who.GUEST], by=None)[1], call, lab.rows["b"], rule.send)
            assert answer.status_code in ({404} if "{" in call else {400, 403, 404}), f"{call}, guest on bench-b"
        with undone():
            answer = called(make_person_key(lab.people[Who.OWNER], by=None)[1], call, lab.rows["b"], rule.send)
            assert (answer.status_code != 403) is (Who.NEIGHBOUR in rule.who), f"{call}, owner of bench-a on bench-b"
    for nobody in ("", "person-unknown", *(make_person_key(one, by=None)[1] for one in (lab.ended, lab.expired))):
        assert called(nobody, call, lab.rows["a"], rule.send).status_code == 401, call


@pytest.mark.parametrize("call", sorted(call for call in CALLS if not call.startswith("GET")))
def test_no_call_takes_a_write_by_session_without_its_token(lab, call):
    if call not in described_calls():
        pytest.skip("another test tells of it")
    client = Client(enforce_csrf_checks=True)
    client.force_login(lab.people[Who.MANAGER])
    before = AuditEntry.objects.count()
    answer = client.generic(call.partition(" ")[0], call_address(call, lab.rows["a"]),
                            json.dumps(filled(CALLS[call].send, lab.rows["a"])), content_type="application/json")
    assert answer.status_code == 403 and "CSRF" in answer.json()["title"] and AuditEntry.objects.count() == before


@pytest.mark.parametrize("call", sorted(call for call in CALLS if not call.startswith("GET")))
def test_a_key_that_only_reads_writes_nothing(lab, call):
    if call not in described_calls():
        pytest.skip("another test tells of it")
    key = make_person_key(lab.people[Who.MANAGER], by=None, scope="read")[1]
    before = AuditEntry.objects.count()
    answer = called(key, call, lab.rows["a"], CALLS[call].send)
    assert answer.status_code == 403 and "only reads" in answer.json()["title"] and AuditEntry.objects.count() == before


def test_the_matrix_would_notice(lab):
    """The check itself: a page that lets in too many, and one that lets in too few."""
    with pytest.raises(AssertionError, match="should be refused with 403"):
        _check_page(lab, "station", "GET", Rule(frozenset({Who.MANAGER})))
    with pytest.raises(AssertionError, match="should be let in"):
        _check_page(lab, "health", "GET", Rule(frozenset(Who)))
