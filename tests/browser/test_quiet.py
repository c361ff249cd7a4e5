"""Shelving by keyboard on a narrow dark phone, and the rehearsal that follows the typing: axe finds nothing, nothing scrolls
sideways."""

import numpy as np
import pytest

from ingest.times import now_us
from labmon.alarms.models import AlarmHold
from labmon.people.models import Role
from tests.browser.test_access import AXE, RULES
from tests.factories import NOON, make_experiment, make_person, make_station, make_tap, store_alarm, store_readings

S = 1_000_000


@pytest.fixture
def owner():
    return make_person(Role.OWNER, username="asha")


@pytest.fixture
def alarm(owner):
    tap = make_tap(make_station("n2", owner=owner, room="North Hall"), "eom-in")
    experiment = make_experiment(tap, owner=owner, name="EOM input")
    return store_alarm(kind="untrusted", tap=tap, experiment=experiment, raised_at=NOON, message="frozen")


def is_fit(page, width):
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    page.evaluate(AXE)
    assert page.evaluate(f"{RULES}.then(result => result.violations.map(one => one.id))") == []


@pytest.mark.parametrize("width", [320, 360])
def test_shelved_and_unshelved_by_keyboard(signed_in, lab, owner, alarm, width):
    page = signed_in(owner)
    page.emulate_media(color_scheme="dark")
    page.set_viewport_size({"width": width, "height": 800})
    page.goto(lab.url("/alarms/"))
    page.locator(f"#shelve-{alarm.pk} > summary").focus()
    page.keyboard.press("Enter")
    is_fit(page, width)
    page.locator(f"#shelve-why-{alarm.pk}").fill("new patch cord")
    page.keyboard.press("Enter")
    page.get_by_text("Kept quiet, still judged").wait_for()
    hold = AlarmHold.objects.get()
    for address in ("/alarms/", "/", "/stations/n2/", f"/experiments/{alarm.experiment_id}/"):
        page.goto(lab.url(address))
        assert page.get_by_text("new patch cord").first.is_visible()
        is_fit(page, width)
    page.locator(f"#end-hold-{hold.pk}").focus()
    page.keyboard.press("Enter")
    page.get_by_text("calls again").wait_for()
    hold.refresh_from_db()
    assert hold.ended_by == owner


def test_the_rehearsal_follows_the_typing(signed_in, lab, owner, alarm):
    dark = np.full(600, 1e-6)
    dark[100:300] = 1e-4
    at_us = now_us() // S * S - 700 * S + np.arange(600) * S
    store_readings(alarm.tap, at_us, port1=1e-3, port2=dark, sequence=np.arange(600), boot="b")
    page = signed_in(owner)
    page.set_viewport_size({"width": 360, "height": 800})
    page.goto(lab.url(f"/experiments/{alarm.experiment_id}/"))
    page.locator("#id_alarm").fill("20")
    page.locator("#rehearsal").get_by_text("would have called 1 time").wait_for()
    page.locator("#id_alarm").fill("5")
    page.locator("#rehearsal").get_by_text("would have called nobody").wait_for()
    is_fit(page, 360)
