"""Leaving, keys, audit and call review in a browser: axe finds nothing, nothing scrolls sideways, by day and at night."""

import pytest
from django.utils import timezone

from labmon.benches.calibration import set_calibration
from labmon.people.models import Role
from labmon.review.figures import FLOOD_WITHIN
from tests.browser.bench import beside
from tests.browser.test_log import shot, violations
from tests.factories import NOON, make_experiment, make_person, make_station, make_tap, store_alarm
from tests.labmon.review.test_queries import tell


@pytest.fixture
def leaver(lab):
    """An owner with a bench, an experiment and alarms of this week."""
    person = make_person(Role.OWNER, username="asha")
    tap = make_tap(make_station("n2", owner=person, room="North Hall"), "eom-in")
    experiment = make_experiment(tap, owner=person, name="EOM input, amplitude noise")
    beside(set_calibration, tap, NOON.replace(year=2020), {"floor1": 1e-9, "floor2": 1e-9}, by=None)
    now = timezone.now()
    for number in range(4):
        raised = now - number * FLOOD_WITHIN
        store_alarm(kind="untrusted", tap=tap, experiment=experiment, raised_at=raised, returned_at=raised, message="frozen")
    tell(person, now)
    return person


@pytest.mark.parametrize(("scheme", "width"), [("light", 1280), ("dark", 360)])
def test_pages(signed_in, lab, leaver, scheme, width):
    page = signed_in(make_person(Role.MANAGER, username="maren"))
    page.emulate_media(color_scheme=scheme)
    page.set_viewport_size({"width": width, "height": 900})
    found = {}
    for name, address in {"leave": f"/people/{leaver.pk}/end/", "audit": "/audit/", "review": "/calls/review/", "you": "/you/",
                          "people": "/people/"}.items():
        page.goto(lab.url(address))
        shot(page, f"{name}-{scheme}")
        if said := violations(page):
            found[address] = said
        if page.evaluate("document.documentElement.scrollWidth") > width:
            found[f"{address} is wide"] = True
    assert found == {}


def test_someone_leaves_by_keyboard(signed_in, lab, leaver):
    page = signed_in(make_person(Role.MANAGER, username="maren"))
    page.goto(lab.url(f"/people/{leaver.pk}/end/"))
    page.get_by_role("button", name="End the access of asha").focus()
    page.keyboard.press("Enter")
    assert "Nobody would have: bench n2" in page.inner_text("[role=alert]")
    page.select_option("#all", "maren")
    page.fill("#reason", "new post")
    page.keyboard.press("Enter")
    page.wait_for_url(lab.url("/people/"))
    assert "The access of asha has ended. 2 things were passed on." in page.inner_text("main")
