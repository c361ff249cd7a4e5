"""A bench joins before a person's eyes: the boxes of the slip tick themselves, and say what is missing."""

import time

import httpx

from labmon.people.models import Role
from tests.browser.bench import judge
from tests.factories import make_person


def test_the_slip_ticks_itself(signed_in, lab):
    page = signed_in(make_person(Role.MANAGER))
    page.goto(lab.url("/join/"))
    page.fill("#id_name", "b08")
    page.fill("#id_name1", "eom-in")
    page.click("button.first")
    page.wait_for_selector("#key")
    key = page.inner_text("#key")

    def send(own_key: str, taps: dict) -> int:
        body = {"boot": "7f3a", "taps": taps}
        headers = {"Authorization": f"Bearer {own_key}"}
        return httpx.post(lab.url("/api/v1/readings"), json=body, headers=headers, timeout=30).status_code

    checklist = page.locator("#checklist")
    assert send(key[:-1], {}) == 401
    checklist.get_by_text("A key that labmon does not know").wait_for()
    assert send(key, {"eom_in": {"port1": [1e-3], "port2": [1e-6]}}) == 400
    checklist.get_by_text("has no tap 'eom_in'").wait_for()
    checklist.get_by_text(f"The key that begins with {key[:4]} came from 127.0.0.1").wait_for()
    now_us = time.time_ns() // 1000
    at = [now_us - (20 - place) * 1_000_000 for place in range(20)]
    columns = {"sequence": list(range(20)), "at": at, "port1": [1e-3 + 1e-7 * place for place in range(20)],
               "port2": [1e-6 + 1e-9 * place for place in range(20)]}
    assert send(key, {"eom-in": columns}) == 200
    judge()
    page.get_by_role("heading", name="b08 has joined").wait_for()
    assert page.locator("#checklist use[href='#tick-done']").count() == 5
    assert page.inner_text("#key") == key
