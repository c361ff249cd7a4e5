"""The logbook in a browser: one tap on a phone, the question, marks on the plot with a list that the keyboard reaches."""

import io
import os
from datetime import timedelta
from pathlib import Path

import pytest
from django.utils import timezone
from PIL import Image

from labmon.logbook.actions import write_entry
from labmon.logbook.models import ConfigurationChange, LogEntry, LogTag
from labmon.people.models import Role
from tests.browser.bench import beside, send_two_port, settle
from tests.browser.test_access import AXE, RULES, settled
from tests.factories import make_person, make_station, make_tap


@pytest.fixture
def bench(lab):
    owner = make_person(Role.OWNER, username="asha")
    tap = make_tap(make_station("n2", room="North Hall", owner=owner), "eom-in")
    send_two_port(lab.address, tap, 24.0, seconds=1200)
    settle()
    now = timezone.now()
    ago = [now - timedelta(minutes=minutes) for minutes in (15, 10, 5)]
    beside(write_entry, tap.station, by=owner, at=ago[0], text="new patch cord, radius 30 mm", tag=LogTag.REPAIR, change="joint")
    beside(write_entry, tap.station, by=owner, at=ago[1], until_at=ago[2], text="warm air on")
    return tap.station


def violations(page):
    page.evaluate(AXE)
    return page.evaluate(f"{RULES}.then(result => result.violations.map(one => [one.id, one.nodes[0].html.slice(0, 160)]))")


@pytest.mark.parametrize(("scheme", "width"), [("light", 1280), ("dark", 360)])
def test_touch_answer_and_marks(signed_in, lab, bench, scheme, width, tmp_path):
    page = signed_in(make_person(Role.RESEARCHER, username="tobias"))
    page.emulate_media(color_scheme=scheme)
    page.set_viewport_size({"width": width, "height": 900})
    settled(page, lab.url("/stations/n2/?span=" + span()))
    shot(page, f"station-{scheme}")
    assert violations(page) == []
    button = page.get_by_role("button", name="I touched the fibre")
    assert button.bounding_box()["height"] >= 44
    button.click()
    page.wait_for_url("**/log/*/")
    assert "Is n2 still as it was?" in page.inner_text("h1")
    shot(page, f"asked-{scheme}")
    assert violations(page) == []
    page.get_by_role("button", name="No, changed: fibre laid anew").click()
    page.wait_for_url("**/stations/n2/")
    assert [one.kind for one in ConfigurationChange.objects.order_by("pk")] == ["joint", "fibre"]
    page.goto(lab.url("/stations/n2/log/"))
    shot(page, f"log-{scheme}")
    assert violations(page) == []
    assert page.evaluate("document.documentElement.scrollWidth") <= width


def test_the_list_of_marks_is_reached_by_keyboard_and_follows_the_span(signed_in, lab, bench):
    page = signed_in(make_person(Role.RESEARCHER))
    settled(page, lab.url("/stations/n2/?span=" + span()))
    marks = page.locator("[data-marks] a")
    assert marks.count() == 2 and "changed: connector or splice" in marks.first.inner_text()
    assert page.evaluate("document.querySelector('.plot').layout.shapes.length") == 3  # two lines and the bar of the span
    marks.first.focus()
    page.keyboard.press("Enter")
    page.wait_for_url("**/log/*/")
    page.go_back()
    page.wait_for_selector("[data-history][data-drawn]")
    page.evaluate("document.activeElement.blur()")
    before = page.get_attribute("[data-history]", "data-drawn")
    for _ in range(8):
        page.click("[data-way=earlier]")
    page.wait_for_function("before => document.querySelector('[data-history]').dataset.drawn !== before", arg=before)
    page.wait_for_function("() => document.querySelector('[data-marks]').hidden")


def test_a_picture_is_sent_and_shown(signed_in, lab, bench, tmp_path):
    page = signed_in(make_person(Role.RESEARCHER))
    page.goto(lab.url("/stations/n2/log/"))
    photo = tmp_path / "spool.jpg"
    out = io.BytesIO()
    Image.new("RGB", (640, 480), (120, 90, 60)).save(out, "JPEG")
    photo.write_bytes(out.getvalue())
    page.fill("#id_text", "the spool as it is now")
    page.set_input_files("#id_picture", str(photo))
    page.get_by_role("button", name="Write it down").click()
    page.wait_for_selector(".message")
    entry = LogEntry.objects.order_by("-pk").first()
    page.goto(lab.url(f"/stations/n2/log/{entry.pk}/"))
    page.wait_for_function("() => document.querySelector('.log-picture').naturalWidth === 640")
    shot(page, "picture")


def span() -> str:
    """The last half hour."""
    now = timezone.now()
    return "/".join(one.strftime("%Y-%m-%dT%H:%M:%SZ") for one in (now - timedelta(minutes=30), now))


def shot(page, name: str) -> None:
    """A picture for people, where they asked for one (SHOTS=folder)."""
    if folder := os.environ.get("SHOTS"):
        page.screenshot(path=str(Path(folder) / f"{name}.png"), full_page=True)
