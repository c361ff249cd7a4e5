"""What a person does with the screens, in a real browser against the real server."""

import re
import time

import pytest
from django.utils import timezone

from ingest.models import Tap, TapKind, Unit
from labmon.alarms.models import Alarm
from labmon.benches.calibration import set_calibration
from labmon.experiments.actions import set_limit
from labmon.people.models import Role
from tests.browser.bench import beside, judge, send_stokes, send_two_port, settle
from tests.browser.conftest import Lab
from tests.factories import NOON, make_experiment, make_person, make_station, make_tap

NO_SOCKET = """
window.WebSocket = class extends EventTarget {
  constructor() {
    super();
    setTimeout(() => this.dispatchEvent(new CloseEvent('close', { code: 1006 })), 10);
  }
};
"""


def watched_tap(lab: Lab, name: str = "n2", *, er_db: float = 26.0, on_delay_s: float = 5.0, seconds: int = 600) -> Tap:
    """A calm bench with a limit of 20 dB and ten minutes of readings.

    It declares 30 s between readings, so that a slow machine does not find it silent in the middle of a test.
    """
    tap = make_tap(make_station(name, room="North Hall"), "eom-in", unit=Unit.W, interval_s=30.0)
    beside(set_calibration, tap, NOON.replace(year=2020), {"floor1": 1e-9, "floor2": 1e-9}, by=None)
    experiment = make_experiment(tap, name=f"EOM input {name}")
    beside(set_limit, experiment, tap, "er_db", alarm=20.0, warning=23.0, on_delay_s=on_delay_s, off_delay_s=5.0, by=None)
    send_two_port(lab.address, tap, er_db, seconds=seconds)
    settle()
    return tap


def live(page) -> None:
    """Wait until the page's socket is open."""
    page.wait_for_selector("#pulse-words:has-text('Live')", timeout=10_000)


def test_sign_in_and_see_how_the_lab_stands(signed_in, lab):
    watched_tap(lab)
    page = signed_in(make_person(Role.RESEARCHER))
    assert "within it" in page.text_content("#sentence")
    assert page.title() == f"{page.text_content('#sentence')} labmon"
    row = page.text_content("tr[data-station=n2]")
    assert "in spec" in row
    assert re.search(r"26\.\d\sdB", row)
    assert re.search(r"\+[\d.]+° · \+[56]\.\d\sdB", row)


def test_a_wrong_password_is_explained(page, lab):
    page.goto(lab.url("/login/"))
    page.fill("#id_username", "nobody")
    page.fill("#id_password", "wrong")
    page.click("button.first")
    assert "did not work" in page.text_content("[role=alert]")


def test_new_readings_and_an_alarm_appear_without_reload(signed_in, lab):
    tap = watched_tap(lab)
    page = signed_in(make_person(Role.RESEARCHER))
    live(page)
    page.evaluate("window.isSamePage = true")
    send_two_port(lab.address, tap, 18.0, seconds=12)
    judge()
    page.wait_for_selector("#waiting li.is-waiting", timeout=5_000)
    assert page.evaluate("window.isSamePage") is True
    assert "1 alarm waits for someone" in page.text_content("#sentence")
    assert page.title().startswith("1 bench below its limit")
    assert page.text_content("tr[data-station=n2] .state") == "below limit"
    assert page.get_attribute("tr[data-station=n2] use", "href") == "#mark-below"
    assert page.text_content("#said") == page.text_content("#sentence")


def test_acknowledge_from_the_lab_page(signed_in, lab):
    tap = watched_tap(lab)
    send_two_port(lab.address, tap, 18.0, seconds=12)
    settle()
    person = make_person(Role.RESEARCHER)
    page = signed_in(person)
    page.fill("#waiting input[type=text]", "on my way")
    page.click("#waiting button")
    page.wait_for_selector("#waiting:not(:has(li))", state="attached")
    alarm = Alarm.objects.get()
    assert (alarm.acknowledged_by, alarm.note) == (person, "on my way")


def test_what_someone_else_acknowledges_disappears_here(signed_in, lab):
    from labmon.alarms.actions import acknowledge_alarm

    tap = watched_tap(lab)
    send_two_port(lab.address, tap, 18.0, seconds=12)
    settle()
    page = signed_in(make_person(Role.RESEARCHER))
    page.goto(lab.url("/alarms/"))
    live(page)
    beside(acknowledge_alarm, Alarm.objects.get().pk, by=make_person(Role.RESEARCHER), note="seen")
    page.wait_for_selector("#alarm-sentence:has-text('all acknowledged')", timeout=5_000)


def test_half_written_notes_survive_a_refresh(signed_in, lab):
    tap, other = watched_tap(lab), watched_tap(lab, "n9")
    send_two_port(lab.address, tap, 18.0, seconds=12)
    settle()
    page = signed_in(make_person(Role.RESEARCHER))
    page.goto(lab.url("/alarms/"))
    live(page)
    page.fill("#alarm-list input[type=text]", "half a sentence")
    send_two_port(lab.address, other, 18.0, seconds=12)
    judge()
    page.wait_for_selector("#alarm-sentence:has-text('2 alarms')", timeout=5_000)
    assert page.input_value("#alarm-list input[type=text]") == "half a sentence"


def test_history_is_drawn_and_zooming_asks_the_server_again(signed_in, lab):
    watched_tap(lab, seconds=3600)
    page = signed_in(make_person(Role.RESEARCHER))
    asked: list[str] = []
    page.on("request", lambda request: asked.append(request.url) if "history.json" in request.url else None)
    page.goto(lab.url("/stations/n2/"))
    page.wait_for_selector("[data-history][data-drawn]", timeout=15_000)
    assert "Extinction ratio between" in page.text_content("[data-history] [data-sentence]")
    first = page.get_attribute("[data-history]", "data-drawn")
    page.click("[data-way=closer]")
    page.wait_for_function("first => document.querySelector('[data-history]').dataset.drawn !== first", arg=first)
    assert "span=20" in page.url
    page.locator("#history-name").evaluate("heading => heading.scrollIntoView()")
    box = page.locator(".plot .nsewdrag").first.bounding_box()
    before = page.get_attribute("[data-history]", "data-drawn")
    page.mouse.move(box["x"] + box["width"] * 0.5, box["y"] + 50)
    page.mouse.down()
    page.mouse.move(box["x"] + box["width"] * 0.8, box["y"] + 60, steps=5)
    page.mouse.up()
    page.wait_for_function("before => document.querySelector('[data-history]').dataset.drawn !== before", arg=before)
    spans = [re.search(r"span=([^&]+)", url).group(1) for url in asked]
    assert len(set(spans)) >= 3


def test_the_trail_of_a_stokes_tap_is_drawn_three_ways(signed_in, lab):
    tap = make_tap(make_station("n1"), "head", kind=TapKind.STOKES)
    beside(set_calibration, tap, NOON.replace(year=2020), {"wanted_state": [1.0, 0.0, 0.0]}, by=None)
    beside(set_limit, make_experiment(tap), tap, "angle_deg", alarm=36.0, warning=25.0, by=None)
    send_stokes(lab.address, tap, seconds=900, turn_deg=20.0)
    settle()
    page = signed_in(make_person(Role.RESEARCHER))
    page.goto(lab.url("/stations/n1/"))
    page.wait_for_selector("[data-trail][data-count]", timeout=15_000)
    assert int(page.get_attribute("[data-trail]", "data-count")) == 900
    assert "it never left the circle of 36.0°" in page.text_content("[data-trail] [data-sentence]")
    pictures = set()
    for drawing in ("disc", "sphere", "map"):
        page.check(f"input[value={drawing}]")
        pictures.add(page.evaluate("document.querySelector('canvas.sky').toDataURL()"))
    assert len(pictures) == 3


def test_standing_still_keeps_values_but_lets_alarms_in(signed_in, lab):
    tap, other = watched_tap(lab), watched_tap(lab, "n9")
    page = signed_in(make_person(Role.RESEARCHER))
    live(page)
    page.click("#stand-still")
    before = page.text_content("tr[data-station=n9] .er")
    send_two_port(lab.address, other, 30.0, seconds=3)
    judge()
    page.wait_for_timeout(2500)
    assert page.text_content("tr[data-station=n9] .er") == before
    send_two_port(lab.address, tap, 18.0, seconds=12)
    judge()
    page.wait_for_selector("#waiting li.is-waiting", timeout=5_000)


def test_without_a_socket_the_page_asks_by_itself(browser, lab, django_user_model):
    """The socket is taken away before the page starts: the alarm still comes, and the page says it is not live."""
    tap = watched_tap(lab)
    person = make_person(Role.RESEARCHER)
    person.set_password("a password for tests")
    person.save()
    page = browser.new_context().new_page()
    page.add_init_script(NO_SOCKET)
    page.goto(lab.url("/login/"))
    page.fill("#id_username", person.username)
    page.fill("#id_password", "a password for tests")
    page.click("button.first")
    page.wait_for_selector("#pulse-words:has-text('Connection lost')", timeout=5_000)
    send_two_port(lab.address, tap, 18.0, seconds=12)
    judge()
    page.wait_for_selector("#waiting li.is-waiting", timeout=14_000)
    page.context.close()


def test_pages_read_without_scripts(browser, lab):
    watched_tap(lab)
    person = make_person(Role.RESEARCHER)
    person.set_password("a password for tests")
    person.save()
    page = browser.new_context(java_script_enabled=False).new_page()
    page.goto(lab.url("/login/"))
    page.fill("#id_username", person.username)
    page.fill("#id_password", "a password for tests")
    page.click("button.first")
    assert "within it" in page.text_content("#sentence")
    page.click("tr[data-station=n2] a")
    assert "inside its limit" in page.text_content("h1")
    page.click("text=The same as a table")
    assert page.locator("#as-table tbody tr").count() >= 1
    page.click("text=earlier")
    assert "span=" in page.url
    page.context.close()


@pytest.fixture(autouse=True)
def clock_is_right():
    """The tests place readings at the server's now."""
    assert abs(timezone.now().timestamp() - time.time()) < 1
