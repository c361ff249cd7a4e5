"""Clearance and back-test in a real browser, wide and on a narrow dark phone: axe finds nothing, nothing scrolls sideways."""

import pytest

from ingest.times import at_of
from labmon.clearance.back_tests import begin_nightly, walk_due
from labmon.logbook.models import LogEntry
from labmon.people.models import Role
from tests.browser.bench import beside
from tests.browser.test_access import AXE, RULES
from tests.factories import make_person
from tests.labmon.clearance.bench import DAY_US, HOUR_US, MONDAY_US, bench_with, nights_of


def is_fit(page, width):
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    page.evaluate(AXE)
    assert page.evaluate(f"{RULES}.then(result => result.violations.map(one => [one.id, one.nodes[0].html.slice(0, 160)]))") == []


@pytest.fixture
def experiment(lab):
    """A bench with 26 days behind it, of which four nights would have failed."""
    made, tap, now_us = beside(bench_with, nights_of(26, {3: 9.0, 8: 10.0, 11: 9.5, 24: 9.0}))
    at = at_of(MONDAY_US + 8 * DAY_US + 2 * HOUR_US)
    LogEntry.objects.create(station=tap.station, at=at, text="door left open", tag="note")
    now = at_of(now_us + HOUR_US)
    beside(begin_nightly, now)
    beside(walk_due, now)
    return made


def test_the_pages_fit(signed_in, lab, experiment, tmp_path):
    page = signed_in(make_person(Role.RESEARCHER))
    start = at_of(MONDAY_US + 25 * DAY_US).strftime("%Y-%m-%d+%H:%M")
    addresses = (f"/experiments/{experiment.pk}/clearance/?length_h=12&start={start}", f"/experiments/{experiment.pk}/",
                 "/clearance/backtest/", f"/experiments/{experiment.pk}/clearance/backtest/")
    for scheme, width in (("light", 1280), ("dark", 360), ("light", 320)):
        page.emulate_media(color_scheme=scheme)
        page.set_viewport_size({"width": width, "height": 900})
        for number, address in enumerate(addresses):
            page.goto(lab.url(address))
            is_fit(page, width)
            page.screenshot(path=str(tmp_path / f"{width}-{number}.png"), full_page=True)


def test_asked_by_keyboard(signed_in, lab, experiment):
    page = signed_in(make_person(Role.RESEARCHER))
    page.goto(lab.url(f"/experiments/{experiment.pk}/"))
    page.get_by_label("Length, h").fill("8")
    page.get_by_label("Start (UTC)").fill(at_of(MONDAY_US + 25 * DAY_US).strftime("%Y-%m-%d %H:%M"))
    page.keyboard.press("Enter")
    page.get_by_role("heading", level=1, name="such nights held").wait_for()
    assert "Not cleared" in page.title() and "length_h=8" in page.url
    assert page.get_by_role("img", name="past windows replayed").is_visible()
    page.get_by_role("link", name="How often this rule was right here").click()
    page.get_by_text("Cleared, and failed").wait_for()
