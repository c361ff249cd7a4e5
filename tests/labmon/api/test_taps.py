"""A tap's newest sample, history and calibration."""

import math

import pytest

from analysis.models import Calibration, TapNow
from labmon.audit.models import AuditEntry

IN = "/api/v1/taps/bench-a/in"
SPAN = "2031-03-04T12:00:00Z/PT2M"
CONTRACT_NOW = {"er_db", "er_sigma_db", "is_lower_bound", "angle_deg", "dop", "power_w", "trust", "trust_reasons", "taken_at",
                "age_s"}


@pytest.mark.parametrize("call", ["now", f"history?span={SPAN}", f"readings?span={SPAN}"])
@pytest.mark.parametrize(("role", "station", "status"), [
    ("manager", "bench-b", 200), ("researcher", "bench-b", 200), ("guest", "bench-a", 200), ("guest", "bench-b", 404),
    ("manager", "bench-c", 404), ("nobody", "bench-a", 401)])
def test_who_reads_which_tap(lab, call, role, station, status):
    assert getattr(lab, role).get(f"/api/v1/taps/{station}/in/{call}").status_code == status


def test_now_has_the_fields_of_the_contract(read_lab):
    said = read_lab.guest.get(f"{IN}/now").json()
    assert CONTRACT_NOW <= said.keys()
    assert said["er_db"] == pytest.approx(20.0, abs=1e-9)        # decibel: 10 log10(1e-3 W / 1e-5 W), ISO 80000-3
    assert said["angle_deg"] == pytest.approx(2 * math.degrees(math.atan(0.1)), abs=1e-9)
    assert said["power_w"] == pytest.approx(1.01e-3, rel=1e-12)
    assert said["taken_at"] == "2031-03-04T12:01:59.000000Z" and said["dop"] is None
    assert said["trust"] in {"trusted", "doubtful"} and said["last_trusted"].keys() >= {"er_db", "power_w"}


def test_now_of_a_tap_without_readings_is_null_throughout(lab):
    said = lab.manager.get(f"{IN}/now").json()
    assert said["taken_at"] is said["er_db"] is said["age_s"] is None and said["trust"] == "none"


def test_a_number_that_is_not_finite_goes_out_as_null(read_lab):
    row = TapNow.objects.get(tap=read_lab.climate)
    said = read_lab.manager.get("/api/v1/taps/bench-a/air/now").json()
    assert said["er_db"] is None and said["temperature_c"] == pytest.approx(22.0) and row.sample


def test_history_is_an_envelope_with_gaps_as_null(read_lab):
    said = read_lab.guest.get(f"{IN}/history", span="2031-03-04T11:59:00Z/PT4M", points=24, quantity="er_db").json()
    assert len(said["at"]) == len(said["mean"]) == len(said["trusted_share"]) <= 24
    assert said["bucket_s"] == 10.0 and said["at"][0] == "2031-03-04T11:59:00.000000Z"
    means = dict(zip(said["at"], said["mean"], strict=True))
    assert means["2031-03-04T11:59:00.000000Z"] is None and means["2031-03-04T12:02:50.000000Z"] is None
    assert means["2031-03-04T12:00:00.000000Z"] == pytest.approx(20.0, abs=1e-6)


@pytest.mark.parametrize("quantity", ["er_db", "angle_deg", "dop", "power_w", "temperature_c", "humidity_pct", "pressure_hpa"])
def test_history_of_every_quantity(read_lab, quantity):
    said = read_lab.guest.get(f"{IN}/history", span=SPAN, quantity=quantity).json()
    assert said["quantity"] == quantity and len(said["at"]) == len(said["min"])


@pytest.mark.parametrize("points", [2, 3, 7, 24, 100, 10_000])
@pytest.mark.parametrize("span", ["2031-03-04T11:59:03.25Z/PT2M", "2031-03-01T00:00:07Z/P7D", "2001-01-01T00:00:00Z/P50Y"])
def test_history_keeps_to_the_number_of_points(read_lab, points, span):
    said = read_lab.guest.get(f"{IN}/history", span=span, points=points).json()
    assert 1 <= len(said["at"]) <= points
    assert any(one is not None for one in said["mean"])


@pytest.mark.parametrize(("query", "field"), [
    ({}, "span"), ({"span": "now-1h/now"}, "span"), ({"span": SPAN, "points": "0"}, "points"),
    ({"span": SPAN, "points": "10001"}, "points"), ({"span": SPAN, "points": "ten"}, "points"),
    ({"span": SPAN, "quantity": "colour"}, "quantity"), ({"span": SPAN, "from": "1"}, "from"),
    ({"span": [SPAN, SPAN]}, "span")])
def test_history_names_the_parameter_at_fault(lab, query, field):
    answer = lab.manager.get(f"{IN}/history", **query)
    assert answer.status_code == 400 and answer.json()["field"] == field


def test_a_calibration_is_a_new_version_that_keeps_what_is_left_out(lab):
    first = lab.owner.patch(f"{IN}/calibration", {"valid_from": "2031-03-04T00:00:00Z", "zero1": 1e-6, "zero2": 2e-6,
                                                  "gain_ratio": 1.05, "floor1": 1e-9, "floor2": 1e-9, "saturation1": 2e-3,
                                                  "leakage": [[1, 0.001], [0.002, 1]],
                                                  "leakage_sigma": [[0, 1e-5], [2e-5, 0]], "wanted_port": 2,
                                                  "wanted_state": [0, 0, 1], "handedness": "ieee"})
    assert first.status_code == 200 and first.json()["valid_from"] == "2031-03-04T00:00:00.000000Z"
    second = lab.owner.patch(f"{IN}/calibration", {"valid_from": "2031-03-05T00:00:00+01:00", "zero2": 3e-6, "saturation1": None,
                                                   "reason": "warm-up"}).json()
    assert (second["zero1"], second["zero2"], second["gain_ratio"]) == (1e-6, 3e-6, 1.05)
    assert second["valid_from"] == "2031-03-04T23:00:00.000000Z" and second["saturation1"] is None
    assert second["leakage"] == [[1.0, 0.001], [0.002, 1.0]] and second["handedness"] == "ieee"
    assert second["leakage_sigma"] == [[0.0, 1e-5], [2e-5, 0.0]]
    assert Calibration.objects.filter(tap=lab.tap).count() == 2
    assert AuditEntry.objects.filter(person=lab.people["owner"], reason="warm-up").count() == 1


@pytest.mark.parametrize(("role", "status"), [
    ("manager", 200), ("owner", 200), ("stranger", 403), ("researcher", 403), ("guest", 403), ("nobody", 401)])
def test_who_calibrates(lab, role, status):
    assert getattr(lab, role).patch(f"{IN}/calibration", {"zero1": 1e-6}).status_code == status
    assert Calibration.objects.exists() == (status == 200)


@pytest.mark.parametrize(("body", "field"), [
    ({"zero1": "none"}, "zero1"), ({"zero1": None}, "zero1"), ({"gain_ratio": 0}, "gain_ratio"),
    ({"gain_ratio": -1}, "gain_ratio"),
    ({"wanted_port": 3}, "wanted_port"), ({"handedness": "left"}, "handedness"), ({"valid_from": "yesterday"}, "valid_from"),
    ({"valid_from": "2031-03-04T00:00:00"}, "valid_from"), ({"wanted_state": [0, 0, 0]}, "wanted_state"),
    ({"leakage": [[1, 1], [1, 1]]}, "leakage"), ({"leakage_sigma": [[-1, 0], [0, 0]]}, "leakage_sigma"),
    ({"floor1": -1}, "floor1"), ({"zero3": 1}, "zero3"),
    ({"saturation1": 0}, "saturation1")])
def test_a_calibration_names_the_field_at_fault(lab, body, field):
    answer = lab.owner.patch(f"{IN}/calibration", {"valid_from": "2031-03-04T00:00:00Z"} | body)
    assert answer.status_code == 400 and answer.json()["field"].startswith(field)
    assert not Calibration.objects.exists()


@pytest.mark.parametrize("body", ["", "{", "[]", "null", '{"zero1": NaN}', '{"zero1": 1e999}', b"\xff\xfe"])
def test_a_body_that_is_not_the_form_is_400(lab, body):
    assert lab.owner.patch(f"{IN}/calibration", body).status_code == 400
