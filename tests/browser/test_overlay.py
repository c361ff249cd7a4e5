"""The proposed limit over the history: dragged with the pointer and moved by keys, the calls follow; a second person consents."""

from datetime import timedelta

import numpy as np
import pytest
from django.utils import timezone

from ingest.times import now_us
from labmon.ahead.backtest import score_limits
from labmon.experiments.actions import set_limit
from labmon.experiments.consent import ask_to_loosen
from labmon.experiments.floors import set_floor
from labmon.experiments.rules import LimitWish
from labmon.people.models import Role
from labmon.pipeline.catch_up import catch_up
from tests.browser.test_quiet import is_fit
from tests.factories import make_experiment, make_person, make_run, make_station, make_tap, store_readings

S = 1_000_000


@pytest.fixture
def bench():
    """Three days of light at 30 dB with an hour at 22 dB each day and one at 18 dB; read each minute."""
    owner = make_person(Role.OWNER, username="asha")
    tap = make_tap(make_station("n2", owner=owner, room="North Hall"), "eom-in", interval_s=60.0)
    experiment = make_experiment(tap, owner=owner, name="EOM input")
    count = 3 * 1440
    er_db = 30.0 + np.random.default_rng(1).normal(0, 0.3, count)
    for day in range(3):
        er_db[day * 1440 + 300 : day * 1440 + 360] = 22.0
    er_db[2000:2060] = 18.0
    at_us = now_us() // (60 * S) * 60 * S - count * 60 * S + np.arange(count) * 60 * S
    set_limit(experiment, tap, "er_db", alarm=20.0, warning=23.0, reason="residual modulation", by=owner)
    store_readings(tap, at_us, port1=1e-3, port2=1e-3 * 10 ** (-er_db / 10), sequence=np.arange(count), boot="b")
    catch_up()
    score_limits()
    return owner, experiment, tap


def opened(signed_in, lab, owner, experiment, width, scheme="light"):
    page = signed_in(owner)
    page.emulate_media(color_scheme=scheme)
    page.set_viewport_size({"width": width, "height": 900})
    page.goto(lab.url(f"/experiments/{experiment.pk}/"))
    page.locator("[data-overlay][data-drawn]").wait_for()
    return page


def calls(page, words):
    page.locator("#rehearsal").get_by_text(words).wait_for()


def test_the_line_is_dragged_and_moved_by_keys(signed_in, lab, bench, tmp_path):
    owner, experiment, _ = bench
    page = opened(signed_in, lab, owner, experiment, 1280)
    assert page.locator("#id_alarm").input_value() == "20.0"
    calls(page, "would have called 1 time")
    handle = page.get_by_role("slider", name="Proposed alarm level")
    handle.scroll_into_view_if_needed()
    box = handle.bounding_box()
    page.mouse.move(box["x"] + 200, box["y"] + box["height"] / 2)
    page.mouse.down()
    page.mouse.move(box["x"] + 200, box["y"] + box["height"] / 2 - 60, steps=6)
    page.mouse.up()
    dragged = float(page.locator("#id_alarm").input_value())
    assert 22.3 < dragged < 28.0
    calls(page, "would have called 4 times")
    page.wait_for_function("document.querySelector('[data-overlay]').dataset.drawn === '4'")
    page.screenshot(path=str(tmp_path / "desktop.png"), full_page=True)
    handle.press("ArrowDown")
    assert float(page.locator("#id_alarm").input_value()) == pytest.approx(dragged - 0.1)
    for _ in range(9):
        handle.press("PageDown")
    assert float(page.locator("#id_alarm").input_value()) == pytest.approx(dragged - 9.1)
    assert float(handle.get_attribute("aria-valuenow")) == pytest.approx(dragged - 9.1, abs=0.01)
    calls(page, "would have called nobody")
    is_fit(page, 1280)


def test_the_quantity_brings_its_proposals_and_a_derived_one_has_no_line(signed_in, lab, bench, tmp_path):
    owner, experiment, _ = bench
    page = opened(signed_in, lab, owner, experiment, 360, "dark")
    page.screenshot(path=str(tmp_path / "narrow.png"), full_page=True)
    page.locator("#id_quantity").select_option("trusted_share")
    page.get_by_text("the window itself waits").wait_for()
    assert page.locator("#id_window_s").input_value() == "600" and page.locator("#id_off_delay_s").input_value() == "600"
    page.locator("#id_alarm").fill("0.9")
    calls(page, "this limit would have called")  # the steady hours are frozen values, so not trusted
    assert not page.get_by_role("slider", name="Proposed alarm level").is_visible()
    is_fit(page, 360)


def test_a_request_and_floors_on_a_narrow_dark_phone(signed_in, lab, bench, tmp_path):
    owner, experiment, tap = bench
    manager = make_person(Role.MANAGER, username="maren")
    set_floor(tap.station, "er_db", 15.0, by=manager, reason="quality")
    make_run(experiment, timezone.now() - timedelta(minutes=5), name="Rb scan")
    ask_to_loosen(experiment, tap, "er_db", LimitWish(alarm=17.0), by=owner, reason="sample at stake")
    page = opened(signed_in, lab, manager, experiment, 360, "dark")
    page.screenshot(path=str(tmp_path / "request.png"), full_page=True)
    is_fit(page, 360)
    page.get_by_role("button", name="Consent").click()
    page.get_by_text("You consented: the limit is in force.").wait_for()
    page.goto(lab.url("/stations/n2/floors/"))
    page.screenshot(path=str(tmp_path / "floors.png"), full_page=True)
    is_fit(page, 360)
    page.goto(lab.url("/stations/n2/"))
    page.get_by_text("Recent drift (3").first.wait_for()
    page.screenshot(path=str(tmp_path / "station.png"), full_page=True)
    is_fit(page, 360)
