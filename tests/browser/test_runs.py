"""Runs in a browser: planning on a phone, the page while a run lasts, its ledger, the week; axe, keyboard, no sideways scroll."""

import os
from datetime import timedelta
from pathlib import Path

import pytest
from django.utils import timezone

from labmon.experiments.actions import set_limit
from labmon.people.models import Role
from labmon.runs.actions import plan_run
from labmon.runs.ledgers import ask_ledger
from labmon.runs.making import make_waiting_ledgers
from labmon.runs.models import Run
from labmon.runs.so_far import account_for_runs
from labmon.runs.starting import start_due_runs
from tests.browser.bench import beside, send_two_port, settle
from tests.browser.test_access import AXE, RULES, settled
from tests.factories import make_experiment, make_person, make_station, make_tap

LOOKS = [("light", 1280), ("dark", 360)]


@pytest.fixture
def bench(lab):
    """A bench at 24 dB for 50 min: a run that lasts since 30 min, one that was over before with a gap at its begin."""
    owner = make_person(Role.OWNER, username="asha", email="asha@lab.example")
    tap = make_tap(make_station("n2", room="North Hall", owner=owner), "eom-in")
    experiment = make_experiment(tap, owner=owner, name="EOM input")
    send_two_port(lab.address, tap, 24.0, seconds=3000)
    settle()
    now = timezone.now().replace(microsecond=0)
    beside(set_limit, experiment, tap, "er_db", alarm=20.0, warning=22.0, by=owner, valid_from=now - timedelta(hours=3))
    past = beside(plan_run, experiment, by=owner, name="before", starts_at=now - timedelta(minutes=60),
                  ends_at=now - timedelta(minutes=35))
    running = beside(plan_run, experiment, by=owner, name="Rb scan 14", starts_at=now - timedelta(minutes=30),
                     ends_at=now + timedelta(hours=11))
    settle()
    beside(start_due_runs)
    beside(account_for_runs)
    beside(ask_ledger, past, by=None)
    beside(make_waiting_ledgers)
    return experiment, past, running


def violations(page):
    page.evaluate(AXE)
    return page.evaluate(f"{RULES}.then(result => result.violations.map(one => [one.id, one.nodes[0].html.slice(0, 160)]))")


def looked_at(page, name, width):
    shot(page, name)
    assert violations(page) == []
    assert page.evaluate("document.documentElement.scrollWidth") <= width


def shot(page, name):
    """Kept where SHOTS says, to be looked at by a person."""
    if folder := os.environ.get("SHOTS"):
        page.screenshot(path=Path(folder) / f"runs-{name}.png", full_page=True)


@pytest.mark.parametrize(("scheme", "width"), LOOKS)
def test_list_week_plan_and_change(signed_in, lab, bench, scheme, width):
    page = signed_in(make_person(Role.RESEARCHER, username="tobias"))
    page.emulate_media(color_scheme=scheme)
    page.set_viewport_size({"width": width, "height": 900})
    page.goto(lab.url("/runs/"))
    assert "One run is under way, none is planned." in page.inner_text("h1")
    looked_at(page, f"list-{scheme}", width)
    page.get_by_role("button", name="Plan a run").click()
    page.wait_for_url("**/runs/new/")
    looked_at(page, f"plan-{scheme}", width)
    page.get_by_label("Name").fill("Rb scan 15")
    page.get_by_label("Start").fill((timezone.now() + timedelta(hours=2)).strftime("%Y-%m-%dT%H:%M"))
    page.get_by_role("button", name="Plan it").click()
    page.wait_for_load_state()
    assert "“Rb scan 14”" in page.inner_text("main") and page.get_by_label("Name").input_value() == "Rb scan 15"
    looked_at(page, f"refused-{scheme}", width)
    page.get_by_label("Start").fill((timezone.now() + timedelta(hours=30)).strftime("%Y-%m-%dT%H:%M"))
    page.get_by_role("button", name="Plan it").click()
    page.wait_for_url("**/runs/*/")
    assert "Rb scan 15 begins in" in page.inner_text("h1")
    looked_at(page, f"planned-{scheme}", width)
    assert Run.objects.filter(name="Rb scan 15").exists()


@pytest.mark.parametrize(("scheme", "width"), LOOKS)
def test_while_it_lasts_and_after(signed_in, lab, bench, scheme, width):
    _, past, running = bench
    page = signed_in(make_person(Role.MANAGER))
    page.emulate_media(color_scheme=scheme)
    page.set_viewport_size({"width": width, "height": 900})
    settled(page, lab.url(f"/runs/{running.pk}/"))
    assert "usable so far" in page.inner_text("h1")
    looked_at(page, f"running-{scheme}", width)
    page.goto(lab.url(f"/runs/{past.pk}/"))
    assert "did not hold" in page.inner_text("h1")
    looked_at(page, f"ledger-{scheme}", width)
    page.get_by_label("Why", exact=True).fill("late readings")
    page.get_by_role("button", name="Make it anew").click()
    page.wait_for_load_state()
    beside(make_waiting_ledgers)
    page.wait_for_function("() => document.querySelector('#ledger').innerText.includes('version 2')")


def test_the_page_of_a_run_follows_the_socket(signed_in, lab, bench):
    _, _, running = bench
    page = signed_in(make_person(Role.MANAGER))
    settled(page, lab.url(f"/runs/{running.pk}/"))
    Run.objects.filter(pk=running.pk).update(name="renamed")
    from labmon.live.publish import publish
    beside(publish, {"kind": "runs", "ids": [running.pk]})
    page.wait_for_function("() => document.querySelector('h1').innerText.includes('renamed')")
