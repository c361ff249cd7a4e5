"""The health page: numbers of one look, for managers, in a bounded number of queries; the forecast with its basis."""

import numpy as np
import pytest
from django.urls import reverse

from ingest.models import DayFile, Touch
from ingest.store.days.seal import seal_days
from labmon.benches.keeping import set_keep_rule
from labmon.disk import queries
from labmon.disk.queries import Forecast, Kept, lab_health
from labmon.people.models import Role
from labmon.screen.health import forecast_text, health_sentence, size_text
from tests.factories import make_person, make_tap, store_readings

pytestmark = pytest.mark.django_db
S = 1_000_000
OLD_US = 1_750_000_000 * S // (86_400 * S) * 86_400 * S


def kept_days(count):
    tap = make_tap()
    for day in range(count):
        store_readings(tap, OLD_US + day * 86_400 * S + np.arange(500) * S, port1=1e-3, port2=1e-6)
    seal_days()
    Touch.objects.all().delete()
    return tap


def test_readings_and_bytes_are_those_of_the_store(monkeypatch):
    kept_days(3)
    store_readings(make_tap(), [OLD_US, OLD_US + 5], port1=1e-3, port2=1e-6)
    monkeypatch.setattr(queries, "disk_room", lambda: (10**9, 2 * 10**9))
    health = lab_health()
    sizes = list(DayFile.objects.values_list("size", flat=True))
    assert (health.days.readings, health.blocks.readings, health.inbox.readings) == (1500, 2, 0)
    assert health.days.size > sum(sizes) and health.database > health.blocks.size > 0 and health.touches == 1
    assert health.forecast.basis_days == 3 and health.forecast.growth >= sum(sizes) / 3
    assert health.forecast.days_left == pytest.approx(10**9 / health.forecast.growth)


def test_the_forecast_goes_by_the_newest_days(monkeypatch):
    kept_days(9)
    DayFile.objects.filter(day_us__lt=OLD_US + 2 * 86_400 * S).update(size=10**12)
    assert lab_health().forecast.basis_days == 7 and lab_health().forecast.growth < 10**6


def test_managers_see_the_page_in_few_queries_however_large_the_lab(client, django_assert_num_queries):
    client.force_login(make_person(Role.MANAGER))
    kept_days(1)
    with django_assert_num_queries(7):
        client.get(reverse("health"))
    kept_days(4)
    set_keep_rule(None, 365, by=None)
    with django_assert_num_queries(7):
        page = client.get(reverse("health")).content.decode()
    assert "All services are up" in page and "Bytes a reading" in page and "the mean of the last 4 sealed days" in page
    assert "raw of the lab kept at least 365 days, set by command line" in page


@pytest.mark.parametrize("role", [Role.GUEST, Role.RESEARCHER, Role.OWNER])
def test_others_do_not(client, role):
    client.force_login(make_person(role))
    assert client.get(reverse("health")).status_code == 403


def test_an_unreadable_file_comes_first(client):
    kept_days(1)
    DayFile.objects.update(fault="it cannot be read (No such file or directory)")
    client.force_login(make_person(Role.MANAGER))
    page = client.get(reverse("health")).content.decode()
    assert "1 day file cannot be read." in page and DayFile.objects.get().name in page


def test_words():
    assert size_text(0) == "0\N{NO-BREAK SPACE}B" and size_text(12_345_678) == "12.3\N{NO-BREAK SPACE}MB"
    assert Kept(0, 8192).bytes_per_reading is None
    few = Forecast(10**9, 10**10, 10**8, 7)
    assert few.days_left == 10 and "about 10 days" in forecast_text(few)
    assert "100.0\N{NO-BREAK SPACE}MB a day" in forecast_text(few)
    assert "known when a day is sealed" in forecast_text(Forecast(10**9, 10**10, None, 0))
    assert health_sentence(None, ["broker"]) == "Missing: broker."
