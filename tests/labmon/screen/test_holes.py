"""Pages say which raw readings are no longer kept or cannot be read, and draw what is still there."""

import numpy as np
import pytest
from django.urls import reverse

from ingest.models import DayFile, Touch
from ingest.store.days.seal import seal_days
from ingest.store.days.storage import days_storage
from ingest.store.read import DamagedStore, Hole, HoleKind
from labmon.benches.keeping import forget_old_days, set_keep_rule
from labmon.people.models import Role
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.nightly import make_day_statistics
from labmon.pipeline.rolling import compact_closed_days
from labmon.screen.door import for_people
from labmon.screen.holes import holes_sentence
from tests.factories import make_person, make_tap, store_readings

pytestmark = pytest.mark.django_db
S = 1_000_000
DAY = 86_400 * S
DAY_US = 1_750_000_000 * S // DAY * DAY
NOW_US = DAY_US + 40 * DAY
HALF_AN_HOUR, WHOLE_DAY = "2025-06-15T12:00:00Z/PT30M", "2025-06-15T00:00:00Z/P1D"


@pytest.fixture
def old_tap():
    """An hour at noon of a day long over, rolled up and sealed."""
    tap = make_tap()
    store_readings(tap, DAY_US + DAY // 2 + np.arange(3600) * S, port1=1e-3, port2=1e-6)
    catch_up(now_us=NOW_US)
    compact_closed_days(NOW_US)
    seal_days(NOW_US)
    assert not Touch.objects.exists()
    return tap


def body(client, tap, span, name="history-json", **query):
    client.force_login(make_person(Role.RESEARCHER))
    answer = client.get(reverse(name, args=[tap.station.name, tap.name]), {"span": span, "quantity": "er_db"} | query)
    assert answer.status_code == 200
    return answer.json()


@pytest.mark.parametrize("span", [HALF_AN_HOUR, WHOLE_DAY])
def test_a_day_no_longer_kept_is_drawn_from_rollups_and_says_so(client, old_tap, span):
    set_keep_rule(None, 30, by=None)
    make_day_statistics(NOW_US)
    assert forget_old_days(NOW_US) == 1
    said = body(client, old_tap, span)
    assert "Raw no longer kept on 2025-06-15: shown from rollups (raw of the lab kept at least 30 days" in said["sentence"]
    assert any(value is not None for value in said["series"]["mean"])


def test_a_damaged_day_is_drawn_from_rollups_and_says_so(client, old_tap):
    days_storage().delete(DayFile.objects.get().name)
    said = body(client, old_tap, HALF_AN_HOUR)
    assert "Raw unreadable on 2025-06-15" in said["sentence"] and any(value is not None for value in said["series"]["mean"])
    assert client.get(reverse("station", args=[old_tap.station.name]), {"span": HALF_AN_HOUR}).status_code == 200


def test_several_days_in_words():
    holes = [Hole(DAY_US + day * DAY, DAY_US + day * DAY + 5, HoleKind.UNREADABLE, "why") for day in range(3)]
    assert "Raw unreadable from 2025-06-15 to 2025-06-17" in holes_sentence(holes) and holes_sentence([]) == ""


def test_a_page_that_needs_unreadable_readings_says_so(client, rf):
    request = rf.get("/")
    request.user = make_person(Role.MANAGER)

    def page(request):
        raise DamagedStore("tap 3, day file from 2025-06-15: gone.")

    answer = for_people(page)(request)
    assert answer.status_code == 409 and b"tap 3, day file from 2025-06-15: gone." in answer.content
