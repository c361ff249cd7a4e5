"""Raw and reduced samples: four forms, piece by piece, by the calibration of then or now."""

import asyncio
import csv
import io
import json

import numpy as np
import pyarrow as pa
import pytest
from asgiref.sync import sync_to_async
from django.db import connections, transaction
from django.test import AsyncClient, Client
from django.utils import timezone

from ingest.models import Block, DayFile
from ingest.store.days.forget import forget_day
from ingest.store.days.seal import days_due, seal_day
from ingest.store.days.storage import days_storage
from ingest.store.read import find_readings
from labmon.api import chunks
from labmon.api import readings as api_readings
from labmon.api.problem import Problem
from labmon.people.keys import make_person_key
from tests.factories import NOON_US
from tests.labmon.api.conftest import SECOND_US, write

IN = "/api/v1/taps/bench-a/in"
SPAN = "2031-03-04T12:00:00Z/PT2M"


def body(caller, tap="in", **query):
    answer = caller.get(f"/api/v1/taps/bench-a/{tap}/readings", **{"span": SPAN} | query)
    assert answer.status_code == 200
    return b"".join(answer.streaming_content)


def rows(caller, tap="in", **query):
    return json.loads(body(caller, tap, **query), parse_constant=pytest.fail)["readings"]


def test_json_gives_what_was_sent_beside_what_was_made_of_it(read_lab):
    said = rows(read_lab.guest)
    assert len(said) == 120 and [one["sequence"] for one in said] == list(range(120))
    first = said[0]
    assert (first["at"], first["boot"]) == ("2031-03-04T12:00:00.000000Z", "boot-1")
    assert (first["raw_port1_W"], first["raw_port2_W"], first["raw_port2_max_W"]) == (1e-3, 1e-5, None)
    assert first["er_db"] == pytest.approx(20.0, abs=1e-9) and first["er_db_trust"] in {"trusted", "doubtful"}


def test_the_span_is_half_open(read_lab):
    assert [one["sequence"] for one in rows(read_lab.guest, span="2031-03-04T12:00:10Z/2031-03-04T12:00:12Z")] == [10, 11]


def test_all_forms_hold_the_same(read_lab):
    listed = rows(read_lab.guest)
    parquet = pa.parquet.read_table(io.BytesIO(body(read_lab.guest, format="parquet")))
    arrow = pa.ipc.open_stream(body(read_lab.guest, format="arrow")).read_all()
    text = list(csv.DictReader(io.StringIO(body(read_lab.guest, format="csv").decode())))
    assert parquet.replace_schema_metadata(None).equals(arrow.replace_schema_metadata(None))
    assert arrow["er_db"].to_pylist() == [one["er_db"] for one in listed] == [float(one["er_db"]) for one in text]
    assert arrow.column_names == list(listed[0]) == list(text[0])
    assert arrow["at"].cast(pa.int64()).to_pylist() == [NOON_US + row * SECOND_US for row in range(120)]


@pytest.mark.parametrize(("form", "kind"), [
    ("csv", "text/csv; charset=utf-8; header=present"), ("json", "application/json"),
    ("parquet", "application/vnd.apache.parquet"), ("arrow", "application/vnd.apache.arrow.stream")])
def test_the_type_says_the_form(read_lab, form, kind):
    assert read_lab.guest.get(f"{IN}/readings", span=SPAN, format=form).headers["Content-Type"] == kind


def test_units_stand_in_the_names(read_lab):
    stokes, climate = rows(read_lab.guest, "sop")[0], rows(read_lab.guest, "air")[0]
    assert {"raw_s0_W", "raw_s3_W", "sop3", "azimuth_deg", "dop"} <= stokes.keys()
    assert {"raw_temperature_c", "temperature_c"} <= climate.keys() and "er_db" not in climate


def test_a_cut_stream_gives_every_reading_once_in_order(read_lab, monkeypatch):
    write(read_lab.tap, from_us=NOON_US + 60_500_000, boot="boot-2", port1=np.full(40, 1e-3), port2=np.full(40, 2e-5))
    whole = rows(read_lab.guest)
    monkeypatch.setattr(chunks, "READINGS_A_CHUNK", 7)
    monkeypatch.setattr(chunks, "ROWS_LOOKED_AT", 2)
    assert len(whole) == 160 and [one["at"] for one in whole] == sorted(one["at"] for one in whole)
    assert rows(read_lab.guest) == whole


def test_no_piece_holds_more_than_allowed_however_long_the_span(lab, monkeypatch):
    for hour in range(10):
        write(lab.tap, from_us=NOON_US + hour * 3600 * SECOND_US, boot=f"boot-{hour}", port1=np.full(100, 1e-3),
              port2=np.full(100, 1e-5))
    monkeypatch.setattr(chunks, "READINGS_A_CHUNK", 250)
    sizes = []
    monkeypatch.setattr(api_readings, "find_readings",
                        lambda *asked: sizes.append(len((found := find_readings(*asked)).readings)) or found)
    assert len(rows(lab.manager, span="2001-01-01T00:00:00Z/P100Y")) == sum(sizes) == 1000
    assert max(sizes) <= 250 and len(sizes) == 5


def test_a_span_without_readings_is_an_empty_list(read_lab):
    assert rows(read_lab.guest, span="2001-01-01T00:00:00Z/P20Y") == []


def test_as_of_shows_what_was_known_then(read_lab):
    then = timezone.now().isoformat()
    assert read_lab.owner.patch(f"{IN}/calibration", {"valid_from": "2031-01-01T00:00:00Z", "zero2": 9e-6}).status_code == 200
    assert rows(read_lab.owner, as_of=then)[0]["er_db"] == pytest.approx(20.0, abs=1e-9)
    assert rows(read_lab.owner)[0]["er_db"] == pytest.approx(30.0, abs=1e-6)
    assert rows(read_lab.owner)[0]["raw_port2_W"] == 1e-5


@pytest.mark.parametrize(("query", "field"), [
    ({"format": "xlsx"}, "format"), ({"as_of": "yesterday"}, "as_of"), ({"span": "P1D"}, "span"), ({"form": "csv"}, "form")])
def test_the_parameter_at_fault_is_named(lab, query, field):
    answer = lab.manager.get(f"{IN}/readings", **{"span": SPAN} | query)
    assert answer.status_code == 400 and answer.json()["field"] == field


@pytest.mark.django_db(transaction=True)
def test_under_asgi_the_same_bytes_come_out(read_lab):
    """The server's way: parts are made in the request's thread, never all at once."""
    _row, key = make_person_key(read_lab.people["owner"], by=None)
    headers = {"authorization": f"Bearer {key}"}
    by_wsgi = b"".join(Client().get(f"{IN}/readings", {"span": SPAN}, headers=headers).streaming_content)

    async def fetched():
        answer = await AsyncClient().get(f"{IN}/readings", {"span": SPAN}, headers=headers)
        assert answer.is_async
        whole = b"".join([part async for part in answer.streaming_content])
        await sync_to_async(connections.close_all)()
        return whole

    assert asyncio.run(fetched()) == by_wsgi


@pytest.fixture
def sealed_day(read_lab):
    """The lab's readings in a day file."""
    for tap_id, day_us in days_due(NOON_US + 10 * 86_400 * SECOND_US, 100):
        seal_day(tap_id, day_us)
    return read_lab


def test_readings_of_a_day_file_look_as_before(read_lab, monkeypatch):
    before = rows(read_lab.guest)
    for tap_id, day_us in days_due(NOON_US + 10 * 86_400 * SECOND_US, 100):
        seal_day(tap_id, day_us)
    assert not Block.objects.exists() and rows(read_lab.guest) == before
    monkeypatch.setattr(chunks, "READINGS_A_CHUNK", 7)
    assert rows(read_lab.guest) == before


def test_days_no_longer_kept_are_named(sealed_day):
    day_us = NOON_US // (86_400 * SECOND_US) * 86_400 * SECOND_US
    with transaction.atomic():
        forget_day(sealed_day.tap.pk, day_us, "raw of the lab kept at least 30 days, set by maren")
    answer = sealed_day.guest.get(f"{IN}/readings", span=SPAN)
    said = json.loads(b"".join(answer.streaming_content))
    assert said["readings"] == [] and said["not_kept"] == [["2031-03-04T00:00:00.000000Z", "2031-03-05T00:00:00.000000Z"]]
    assert answer.headers["Labmon-Not-Kept"] == "2031-03-04T00:00:00.000000Z/2031-03-05T00:00:00.000000Z"


def test_an_unreadable_day_is_refused_at_once_when_it_is_known_and_breaks_off_when_it_is_not(sealed_day):
    file = DayFile.objects.get(tap=sealed_day.tap)
    days_storage().delete(file.name)
    with pytest.raises(Problem, match="cannot be read"):
        list(sealed_day.guest.get(f"{IN}/readings", span=SPAN).streaming_content)
    answer = sealed_day.guest.get(f"{IN}/readings", span=SPAN)
    assert answer.status_code == 409 and file.name in answer.json()["detail"] and len(answer.json()["unreadable"]) == 1
