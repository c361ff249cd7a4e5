"""The lab page's rows: order kept, stale values doubtful, and 200 benches within the page's budget."""

import gzip
import random
from datetime import UTC, datetime, timedelta
from html.parser import HTMLParser

import pytest
from django.template.loader import render_to_string

from labmon.benches.course import Course
from labmon.benches.queries import BenchRow
from labmon.screen.course import margins_of
from labmon.screen.lab_rows import as_json, lab_view, margin_text, title_of, value_text
from labmon.screen.standing import Standing

NOW = datetime(2031, 3, 4, 2, 11, tzinfo=UTC)


def bench(station="n2", state="in spec", **fields) -> BenchRow:
    """A calm two-port bench."""
    usual = {
        "station": station,
        "room": "North Hall",
        "purpose": "",
        "owner": None,
        "state": state,
        "tap": "eom-in",
        "kind": "two-port",
        "quantity": "er_db",
        "value": 26.0,
        "er_db": 26.0,
        "er_is_lower_bound": False,
        "er_is_upper_bound": False,
        "angle_deg": 5.7,
        "angle_is_upper_bound": False,
        "margin_db": 6.0,
        "margin_deg": 5.7,
        "margin_is_bound": False,
        "limit_quantity": "er_db",
        "limit_alarm": 20.0,
        "trust": "trusted",
        "reasons": [],
        "last_heard_at": NOW - timedelta(seconds=3),
        "silent_s": 3.0,
        "is_silent": False,
        "open_alarms": 0,
        "unacknowledged": 0,
        "sparkline": Course("er_db", 0, 3600.0, [26.0] * 24),
    }
    return BenchRow(**(usual | fields))


class Counter(HTMLParser):
    """Counts elements."""

    count = 0

    def handle_starttag(self, tag, attrs):
        self.count += 1

    handle_startendtag = handle_starttag


def rendered(view) -> str:
    return render_to_string("screen/lab.html", {"view": view, "title": title_of(view), "back": "/"})


def test_two_hundred_benches_fit_the_budget():
    """SCREENS: at most 2,500 nodes and 60 kB gzipped for 200 benches, 20 of them abnormal."""
    draw = random.Random(4)
    states = ["below limit", "no reading", "untrusted", "thin"]
    benches = []
    for index in range(200):
        er_db = draw.uniform(20.2, 31.0)
        course = [None if draw.random() < 0.02 else er_db + draw.gauss(0, 1.0) for _ in range(24)]
        benches.append(
            bench(
                f"bench-{index:03d}",
                states[index % 4] if index % 10 == 0 else "in spec",
                room=f"Room {index % 8}",
                value=er_db,
                er_db=er_db,
                margin_db=er_db - 20.0,
                margin_deg=draw.uniform(0.1, 8.0),
                sparkline=Course("er_db", 0, 3600.0, course),
            )
        )
    page = rendered(lab_view(benches, NOW))
    counter = Counter()
    counter.feed(page)
    assert counter.count <= 2_500 - 60  # what a signed-in frame adds
    assert len(gzip.compress(page.encode(), 6)) <= 60_000


def test_rows_keep_the_order_they_come_in():
    names = ["z", "a", "m"]
    assert [row.station for row in lab_view([bench(name) for name in names], NOW).rows] == names


@pytest.mark.parametrize(
    ("fields", "value", "margin"),
    [
        ({}, "26.0 dB", "+5.7° · +6.0 dB"),
        (
            {"er_db": 41.2, "er_is_lower_bound": True, "margin_is_bound": True, "margin_db": 21.2, "margin_deg": 10.4},
            "≥ 41.2 dB",
            "≥ +10.4° · ≥ +21.2 dB",
        ),
        ({"er_db": None, "value": None, "margin_db": None, "margin_deg": None}, "–", "–"),
        ({"er_db": None, "quantity": "dop", "value": 0.98, "margin_db": None, "margin_deg": None}, "0.980", "–"),
        ({"er_db": None, "quantity": "temperature_c", "value": 21.43, "margin_db": None, "margin_deg": None}, "21.43 °C", "–"),
    ],
)
def test_values_in_words(fields, value, margin):
    row = bench(**fields)
    assert value_text(row).replace("\xa0", " ") == value
    assert margin_text(row).replace("\xa0", " ") == margin


def test_a_silent_bench_is_parked_and_its_last_value_is_doubtful():
    row = lab_view([bench(state="no reading", last_heard_at=NOW - timedelta(minutes=104))], NOW).rows[0]
    assert row.mark.margin_db is None
    assert row.is_doubtful
    assert row.heard.replace("\xa0", " ") == "1 h 44"


def test_json_says_what_the_page_says():
    view = lab_view([bench("n2", "below limit", margin_db=-0.6, unacknowledged=1), bench("n1")], NOW)
    body = as_json(view, with_course=False)
    assert body["sentence"] == "1 bench below its limit. 1 alarm waits for someone."
    assert body["title"].startswith(body["sentence"])
    assert [row["shape"] for row in body["rows"]] == ["#mark-below", None]
    assert "course" not in body["rows"][0]
    assert as_json(view, with_course=True)["rows"][0]["course"].startswith("M")


def test_the_course_hangs_from_the_limit():
    assert margins_of(bench(sparkline=Course("er_db", 0, 3600.0, [21.0, None, 19.0]))) == [1.0, None, -1.0]
    angles = margins_of(
        bench(limit_quantity="angle_deg", limit_alarm=36.0, sparkline=Course("angle_deg", 0, 3600.0, [36.0, 18.0, 72.0]))
    )
    assert angles[0] == pytest.approx(0.0)
    assert angles[1] > 0 > angles[2]
    free = margins_of(bench(limit_quantity=None, limit_alarm=None, sparkline=Course("er_db", 0, 3600.0, [30.0, 31.0, 32.0])))
    assert free == [3.0, 4.0, 5.0]


def test_every_state_word_of_the_queries_is_known():
    from labmon.benches.show import BenchState

    assert {
        row.standing for row in lab_view([bench(f"b{index}", state.value) for index, state in enumerate(BenchState)], NOW).rows
    } == set(Standing)
