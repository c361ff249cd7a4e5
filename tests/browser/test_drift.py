"""The section on how a tap drifts, opened on a dark phone: axe finds nothing, nothing scrolls sideways."""

import pytest

from analysis.models import DayStatistics
from analysis.record.statistics_facts import statistics_facts
from labmon.people.models import Role
from tests.analysis.drift.test_night import stokes_night
from tests.analysis.drift.test_tap_statistics import HORIZONTAL, Temperature, tap_statistics, two_port_day
from tests.browser.test_access import AXE, RULES
from tests.factories import NOON_US, make_person, make_station, make_tap

MIDNIGHT_US = NOON_US - 43_200_000_000


@pytest.fixture
def told():
    """Two taps with a day's statistics each."""
    station = make_station("n2", room="North Hall")
    at_us, _, temperature, _, two_port = two_port_day()
    found = {"eom-in": tap_statistics(two_port, temperature=Temperature(at_us, temperature)),
             "head": tap_statistics(stokes_night()[1], wanted_state=HORIZONTAL)}  # fmt: skip
    for name, one in found.items():
        facts = {"why_none": "", "is_complete": True, "temperature_from": "air"} | statistics_facts(one)
        DayStatistics.objects.create(tap=make_tap(station, name), day_us=MIDNIGHT_US, readings=9, facts=facts)


@pytest.mark.parametrize("width", [320, 360])
def test_it_opens_by_keyboard_and_fits(signed_in, lab, told, width):
    page = signed_in(make_person(Role.MANAGER))
    page.emulate_media(color_scheme="dark")
    page.set_viewport_size({"width": width, "height": 800})
    page.goto(lab.url("/stations/n2/"))
    for summary in page.locator("details[id^=drift-] > summary").all():
        summary.focus()
        page.keyboard.press("Enter")
    assert page.locator("details[id^=drift-][open] dd").first.is_visible()
    assert page.get_by_text("Worst ER of the thermal arc").first.is_visible()
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    page.evaluate(AXE)
    assert page.evaluate(f"{RULES}.then(result => result.violations.map(one => one.id))") == []
