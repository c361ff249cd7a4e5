"""History and trail as JSON, over the real store, pipeline and rollups."""

import json
from datetime import UTC, datetime, timedelta

import numpy as np
import pytest

from ingest.models import TapKind
from ingest.store.append import write_blocks
from labmon.alarms.models import Alarm
from labmon.api.span import Span
from labmon.benches.calibration import set_calibration
from labmon.experiments.actions import set_limit
from labmon.people.models import Role
from labmon.pipeline.catch_up import catch_up
from labmon.screen.span import span_text
from tests.factories import make_experiment, make_person, make_station, make_tap

pytestmark = pytest.mark.django_db(transaction=True)
NOON = datetime(2024, 3, 4, 12, tzinfo=UTC)
NOON_US = int(NOON.timestamp()) * 1_000_000
SECONDS = 7200
BEGIN = NOON - timedelta(seconds=SECONDS)


def ports(er_db: np.ndarray) -> dict[str, np.ndarray]:
    """Ports that together give 1 mW; leak is 10^(-ER/10)."""
    leak = 10.0 ** (-er_db / 10.0)
    return {"port1": 1e-3 / (1 + leak), "port2": 1e-3 * leak / (1 + leak), "temperature_c": np.full(len(er_db), 21.4)}


@pytest.fixture
def tap():
    """Two hours up to noon: 26 dB, a dip to 18 dB for ten minutes, a hole of twenty minutes, ten minutes of dark."""
    made = make_tap(make_station("n2", room="North Hall"), "eom-in")
    set_calibration(made, BEGIN - timedelta(days=1), {"floor1": 1e-9, "floor2": 1e-9}, by=None)
    second = np.arange(SECONDS)
    er_db = np.where((second >= 1200) & (second < 1800), 18.0, 26.0) + 0.1 * np.sin(second * 1.7)
    columns = ports(er_db)
    is_dark = (second >= 6000) & (second < 6600)
    noise = 2e-10 * np.sin(second * 2.3)
    columns["port1"] = np.where(is_dark, noise, columns["port1"])
    columns["port2"] = np.where(is_dark, noise[::-1], columns["port2"])
    is_kept = (second < 3000) | (second >= 4200)
    at_us = NOON_US - SECONDS * 1_000_000 + second * 1_000_000
    set_limit(make_experiment(made), made, "er_db", alarm=20.0, warning=23.0, valid_from=BEGIN - timedelta(hours=1), by=None)
    write_blocks(made, at_us[is_kept], {name: column[is_kept] for name, column in columns.items()})
    catch_up()
    return made


def answer(client, tap, quantity="er_db", *, role=Role.RESEARCHER, begin=BEGIN, end=NOON, points=720, view="history"):
    client.force_login(make_person(role))
    address = f"/stations/{tap.station.name}/taps/{tap.name}/{view}.json"
    return client.get(address, {"quantity": quantity, "points": points, "span": span_text(Span(begin, end))})


def body_of(response):
    return json.loads(response.content, parse_constant=lambda word: pytest.fail(f"{word} in JSON"))


def test_history_has_the_dip_the_hole_and_the_dark(client, tap):
    body = body_of(answer(client, tap))
    series = body["series"]
    means = [None if value is None else value / series["scale"] for value in series["mean"]]
    times = [(series["x0_ms"] + (index + 0.5) * series["dx_ms"] - BEGIN.timestamp() * 1e3) / 1e3 for index in range(len(means))]
    dip = [mean for mean, at in zip(means, times, strict=True) if 1220 < at < 1780]
    assert max(dip) < 18.3
    assert [word for _, _, word in series["gaps"]] == ["no reading", "no value"]
    hole, dark = series["gaps"]
    assert hole[1] - hole[0] == pytest.approx(1200e3, abs=30e3)
    assert dark[1] - dark[0] == pytest.approx(600e3, abs=60e3)
    assert "1 gap with no reading, 20" in body["sentence"].replace("\xa0", " ")


def test_limits_and_the_alarm_stand_at_their_level(client, tap):
    series = body_of(answer(client, tap))["series"]
    assert [(line["alarm"], line["warning"], line["until_ms"]) for line in series["limits"]] == [(20.0, 23.0, None)]
    raised = Alarm.objects.filter(kind="limit").get()
    assert [(line["from_ms"], line["at"], line["level"]) for line in series["alarms"]] == [
        (raised.raised_at.timestamp() * 1e3, 20.0, "alarm")
    ]


def test_an_er_limit_is_drawn_on_the_angle_too(client, tap):
    series = body_of(answer(client, tap, "angle_deg"))["series"]
    assert series["limits"][0]["alarm"] == pytest.approx(11.42, abs=0.005)


def test_power_is_drawn_in_dbm(client, tap):
    series = body_of(answer(client, tap, "power_w"))["series"]
    known = [value for value in series["mean"] if value is not None]
    assert np.median(known) == pytest.approx(0.0, abs=1)  # 1 mW is 0 dBm; hundredths
    assert series["limits"] == []


def test_temperature_comes_along_and_else_from_the_rooms_sensor(client, tap):
    assert body_of(answer(client, tap))["temperature"]["mean"][10] == 2140
    bare = make_tap(make_station("n3", room="North Hall"), "out")
    air = make_tap(make_station("air", room="North Hall"), "air", kind=TapKind.CLIMATE)
    at_us = NOON_US - np.arange(600)[::-1] * 1_000_000
    write_blocks(bare, at_us, {name: column for name, column in ports(np.full(600, 26.0)).items() if name != "temperature_c"})
    write_blocks(air, at_us, {"temperature_c": np.full(600, 19.5)})
    catch_up()
    body = body_of(answer(client, bare, begin=NOON - timedelta(minutes=10)))
    assert {value for value in body["temperature"]["mean"] if value is not None} == {1950}


def test_a_close_look_has_no_gaps_between_single_readings(client, tap):
    """Ten seconds at a thousand points asked: readings are a second apart, each holds until the next."""
    series = body_of(answer(client, tap, begin=BEGIN + timedelta(seconds=600), end=BEGIN + timedelta(seconds=610), points=1000))[
        "series"
    ]
    assert series["gaps"] == []
    assert None not in series["mean"]


def test_the_table_says_the_same(client, tap):
    client.force_login(make_person(Role.RESEARCHER))
    page = client.get(f"/stations/n2/?span={span_text(Span(BEGIN, NOON))}").content.decode()
    assert "26.0" in page
    assert page.count('<th scope="row" class="nowrap">') >= 40


def test_payload_of_a_wide_picture_stays_small(client, tap):
    import gzip

    wide = answer(client, tap, points=2000)
    assert len(gzip.compress(wide.content, 6)) < 45_000


@pytest.mark.parametrize(
    "asked", [{"quantity": "leak"}, {"span": "yesterday"}, {"points": "many"}, {"span": ""}, {"quantity": "dop"}]
)
def test_what_cannot_be_asked_is_refused_in_words(client, tap, asked):
    client.force_login(make_person(Role.RESEARCHER))
    usual = {"quantity": "er_db", "span": span_text(Span(BEGIN, NOON)), "points": "100"}
    refused = client.get("/stations/n2/taps/eom-in/history.json", usual | asked)
    assert refused.status_code == 400
    assert len(refused.content) > 20


def test_a_guest_fetches_no_history_of_other_benches(client, tap):
    assert answer(client, tap, role=Role.GUEST).status_code == 404


def test_an_empty_span_says_so(client, tap):
    body = body_of(answer(client, tap, begin=BEGIN - timedelta(days=9), end=BEGIN - timedelta(days=8)))
    assert body["sentence"] == "No reading in this span."
    assert body["temperature"] is None


def test_a_trail_breaks_at_gaps_and_knows_its_circle(client):
    head = make_tap(make_station("n1"), "head", kind=TapKind.STOKES)
    set_calibration(head, BEGIN - timedelta(days=1), {"wanted_state": [1.0, 0.0, 0.0]}, by=None)
    set_limit(make_experiment(head), head, "angle_deg", alarm=36.0, valid_from=BEGIN - timedelta(hours=1), by=None)
    turn = np.radians(np.linspace(0.0, 40.0, 600))
    at_us = NOON_US - 600_000_000 + np.arange(600) * 1_000_000
    columns = {"s0": np.ones(600), "s1": np.cos(turn), "s2": np.sin(turn), "s3": np.zeros(600)}
    is_kept = (np.arange(600) < 200) | (np.arange(600) >= 300)
    write_blocks(head, at_us[is_kept], {name: column[is_kept] for name, column in columns.items()})
    catch_up()
    body = body_of(answer(client, head, begin=NOON - timedelta(minutes=10), view="trail"))
    assert body["s1"].count(None) == 1
    assert (body["wanted"], body["tolerance_deg"]) == ([1.0, 0.0, 0.0], 36.0)
    assert "Last 40.0° from the wanted state" in body["sentence"]
    assert "% of the readings lie outside the circle of 36.0°" in body["sentence"]
