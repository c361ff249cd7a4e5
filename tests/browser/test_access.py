"""Everyone can use the pages: axe finds nothing, nothing scrolls sideways, the keyboard reaches all."""

from datetime import UTC, datetime
from pathlib import Path

import pytest

from ingest.models import SetAside, TapKind
from labmon.benches.calibration import set_calibration
from labmon.experiments.actions import set_limit
from labmon.experiments.models import Experiment
from labmon.people.models import Role
from tests.browser.bench import beside, send_stokes, send_two_port, settle
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_station, make_tap

AXE = (Path(__file__).parent / "vendor" / "axe.min.js").read_text()
RULES = "axe.run(document, {runOnly: ['wcag2a', 'wcag2aa', 'wcag21a', 'wcag21aa', 'wcag22aa', 'best-practice']})"


@pytest.fixture
def addresses(lab) -> list[str]:
    """A lab with everything a page can show: alarm, gap, trail, set-aside reading, limits, keys."""
    tap = make_tap(make_station("n2", room="North Hall"), "eom-in")
    head = make_tap(make_station("n1", room="North Hall"), "head", kind=TapKind.STOKES)
    make_tap(make_station("s3", room="South Hall"), "reel")
    beside(set_calibration, tap, NOON.replace(year=2020), {"floor1": 1e-9, "floor2": 1e-9}, by=None)
    beside(set_calibration, head, NOON.replace(year=2020), {"wanted_state": [1.0, 0.0, 0.0]}, by=None)
    experiment = make_experiment(tap, head, name="EOM input, amplitude noise")
    beside(set_limit, experiment, tap, "er_db", alarm=20.0, warning=23.0, on_delay_s=5, reason="residual modulation", by=None)
    beside(set_limit, experiment, head, "angle_deg", alarm=36.0, warning=25.0, by=None)
    send_two_port(lab.address, tap, 18.0, seconds=60)
    send_stokes(lab.address, head, seconds=120, turn_deg=20.0)
    settle()
    SetAside.objects.create(
        station=tap.station,
        tap=tap,
        arrival_us=NOON_US,
        field="port2",
        why="null is not a power",
        do="leave the reading out",
        reading={"port2": None, "port1": 1.25},
        digest=b"2" * 16,
    )
    number = Experiment.objects.get().pk
    return [
        "/",
        "/stations/n2/",
        "/stations/n1/",
        "/alarms/",
        "/alarms/?state=all",
        "/experiments/",
        f"/experiments/{number}/",
        "/experiments/new/",
        "/stations/n2/taps/eom-in/calibration/",
        "/stations/n2/set-aside/",
        "/stations/n2/import/",
        "/join/",
        "/stations/n2/joining/",
        "/stations/n2/taps/eom-in/zero/",
        "/stations/n2/taps/eom-in/gain/",
        "/stations/n2/taps/eom-in/leakage/",
        f"/stations/n2/taps/eom-in/leakage/?straight={now_text()}&seconds=30&light_er_db=40",
        f"/stations/n2/taps/eom-in/zero/?from={now_text()}&seconds=30",
        "/people/",
        "/audit/",
        "/you/",
        "/nowhere/",
    ]


def now_text() -> str:
    """Now, as addresses say it."""
    return datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def settled(page, url: str) -> None:
    """Go there, and wait until what draws has drawn."""
    page.goto(url)
    if page.locator("[data-history]").count():
        page.wait_for_selector("[data-history][data-drawn]", timeout=15_000)


@pytest.mark.parametrize(("scheme", "width"), [("light", 1280), ("dark", 360)])
def test_axe_finds_nothing(signed_in, lab, addresses, scheme, width):
    page = signed_in(make_person(Role.MANAGER))
    page.emulate_media(color_scheme=scheme)
    page.set_viewport_size({"width": width, "height": 800})
    found = {}
    for address in addresses:
        settled(page, lab.url(address))
        page.evaluate(AXE)
        violations = page.evaluate(
            f"{RULES}.then(result => result.violations.map(one => [one.id, one.nodes[0].html.slice(0, 160)]))"
        )
        if violations:
            found[address] = violations
    assert found == {}


def test_axe_would_find_a_fault(signed_in, lab):
    """The check itself: a seeded empty button and a missing label are found."""
    page = signed_in(make_person(Role.MANAGER))
    page.evaluate("document.querySelector('main').insertAdjacentHTML('beforeend', '<button></button><input>')")
    page.evaluate(AXE)
    assert {"button-name", "label"} <= set(page.evaluate(f"{RULES}.then(result => result.violations.map(one => one.id))"))


@pytest.mark.parametrize("width", [320, 360])
def test_no_page_scrolls_sideways(signed_in, lab, addresses, width):
    """WCAG 2.2, success criterion 1.4.10: at 320 CSS px; tables scroll in their own box."""
    page = signed_in(make_person(Role.MANAGER))
    page.set_viewport_size({"width": width, "height": 800})
    wide = {}
    for address in addresses:
        settled(page, lab.url(address))
        seen = page.evaluate("document.documentElement.scrollWidth")
        if seen > width:
            wide[address] = seen
    assert wide == {}


def test_the_keyboard_reaches_the_content_first(signed_in, lab, addresses):
    page = signed_in(make_person(Role.MANAGER))
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.textContent") == "Go to the content"
    page.keyboard.press("Enter")
    assert page.evaluate("document.activeElement.id") == "main"


def test_history_moves_by_keyboard(signed_in, lab, addresses):
    page = signed_in(make_person(Role.MANAGER))
    settled(page, lab.url("/stations/n2/"))
    before = page.get_attribute("[data-history]", "data-drawn")
    page.focus("[data-way=wider]")
    page.keyboard.press("Enter")
    page.wait_for_function("before => document.querySelector('[data-history]').dataset.drawn !== before", arg=before)


def test_nothing_moves_when_motion_is_unwanted(signed_in, lab, addresses):
    page = signed_in(make_person(Role.MANAGER))
    assert page.evaluate("document.getAnimations().length") > 0
    page.emulate_media(reduced_motion="reduce")
    page.reload()
    assert page.evaluate("document.getAnimations().length") == 0


def test_touch_targets_are_large_on_a_phone(signed_in, lab, addresses):
    """The acknowledge button is at least 48 px high, for a thumb at night."""
    page = signed_in(make_person(Role.MANAGER))
    page.set_viewport_size({"width": 360, "height": 800})
    box = page.locator("#waiting button").first.bounding_box()
    assert box["height"] >= 48
    assert box["width"] >= 280
