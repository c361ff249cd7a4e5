"""An event taken from its link on a narrow dark phone; the rota, drills and "how you are told", at a desk and on a phone."""

from datetime import timedelta

import pytest
from django.utils import timezone

from labmon.drills.models import Drill
from labmon.events.models import Event, OnCall
from labmon.events.telling import tell_due
from labmon.people.models import Role
from labmon.tell.models import Delivery, DeliveryTry, Webhook
from tests.browser.test_quiet import is_fit
from tests.factories import make_person
from tests.labmon.events.lab import call, make_alarm, make_bench

SIZES = {"desk": (1280, 900, "light"), "phone": (360, 800, "dark")}


@pytest.fixture(params=SIZES)
def look(request):
    width, height, scheme = SIZES[request.param]

    def show(page, address):
        page.set_viewport_size({"width": width, "height": height})
        page.emulate_media(color_scheme=scheme)
        page.goto(address)
        is_fit(page, width)
        return request.param

    return show


@pytest.fixture
def owner():
    return make_person(Role.OWNER, username="asha", email="asha@lab.example")


def test_an_outage_is_taken_within_three_taps_of_its_link(signed_in, lab, owner, look, tmp_path):
    taps = [make_bench(f"b{number:02d}", owner, room="South Hall", network="south-net") for number in range(5)]
    call(*(make_alarm(tap) for tap in taps))
    tell_due(timezone.now() + timedelta(minutes=1))
    delivery = Delivery.objects.get()
    DeliveryTry.objects.create(delivery=delivery, at=timezone.now(), took_s=0.2, is_handed_over=False, said="421 try later")
    page = signed_in(owner)
    event = Event.objects.get()
    size = look(page, lab.url(f"/events/{event.pk}/"))
    page.screenshot(path=tmp_path / f"event-{size}.png", full_page=True)
    assert "5 benches" in page.locator("h1").inner_text()
    page.locator("#take-event").click()
    page.get_by_text("You have it: 5 alarms acknowledged").wait_for()
    event.refresh_from_db()
    assert event.taken_by == owner and page.get_by_text("Taken by asha").is_visible()
    is_fit(page, SIZES[size][0])
    page.screenshot(path=tmp_path / f"event-taken-{size}.png", full_page=True)


def test_pages_of_calling(signed_in, lab, look, tmp_path):
    chief = make_person(username="maren", email="maren@lab.example")
    other = make_person(Role.RESEARCHER, username="joren", email="joren@lab.example")
    now = timezone.now().replace(minute=0, second=0, microsecond=0)
    middle = now + timedelta(days=3, hours=8)
    OnCall.objects.create(person=chief, from_at=now - timedelta(hours=8), until_at=middle)
    OnCall.objects.create(person=other, from_at=middle, until_at=middle + timedelta(days=7))
    Webhook.objects.create(name="corridor lamp", url="https://hooks.lab.example/labmon")
    steps = {name: now + timedelta(seconds=after) for name, after in (
        ("sent_at", 1), ("answered_at", 1.2), ("reduced_at", 2.5), ("raised_at", 2.5), ("written_at", 2.6), ("handed_at", 4))}
    Drill.objects.create(person=other, person_name="joren", begun_at=now, ended_at=now + timedelta(minutes=30),
                         failed_step="person", fault="joren did not take it", week="2031-W10", **steps)
    page = signed_in(chief)
    for address in ("calls", "drills", "you/telling", "alarms"):
        size = look(page, lab.url(f"/{address}/"))
        page.screenshot(path=tmp_path / f"{address.replace('/', '-')}-{size}.png", full_page=True)
    page.goto(lab.url("/calls/"))
    page.locator("#id_person").select_option("joren")
    page.get_by_role("button", name="Put on call").click()
    page.get_by_text("joren is on call until").first.wait_for()
    assert OnCall.objects.count() == 3


def test_what_a_bench_shares(signed_in, lab, owner, look, tmp_path):
    make_bench("b1", owner, room="North Hall", laser="Beacon")
    tap = make_bench("b2", owner)
    page = signed_in(owner)
    size = look(page, lab.url("/stations/b2/shared/"))
    page.screenshot(path=tmp_path / f"shared-{size}.png", full_page=True)
    page.locator("#id_laser").fill("Beacon")
    page.get_by_role("button", name="Keep").click()
    page.get_by_text("make one call").wait_for()
    tap.station.bench.refresh_from_db()
    assert tap.station.bench.laser == "Beacon" and page.get_by_text("Laser Beacon").is_visible()
