"""The whole demo laboratory, built as `make demo` builds it: readings, rollups, trust where the ledger says, alarms."""

import time

import numpy as np
import pytest
from django.db import connection

from analysis.judge.rule import Quantity
from analysis.record.reduce_span import reduced_samples
from analysis.record.rollups import history
from analysis.reduce.trust import Reason, Trust
from ingest.models import Block, Station, Tap
from labmon.alarms.models import Alarm, AlarmKind
from labmon.demo.air import ROOMS
from labmon.demo.benches import BENCHES, bench_named
from labmon.demo.build import build_demo_lab
from labmon.demo.folder import read_notes
from labmon.demo.moments import moment
from labmon.events.models import Event
from labmon.people.models import Person
from labmon.people.rights import has_access

pytestmark = [pytest.mark.slow, pytest.mark.django_db(transaction=True)]


def _us(notes, at_s):
    return notes.day_one_us + round(at_s * 1e6)


def _samples(notes, name, first_s, last_s):
    tap = Tap.objects.select_related("station").get(station__name=bench_named(name).station)
    return reduced_samples(tap, _us(notes, first_s), _us(notes, last_s))


def _share_with(samples, quantity, reason):
    return np.mean((samples.reasons[quantity] & np.uint32(reason)) != 0)


def _limit_alarms(notes, name):
    """(begin, end) in s since day 1 of the bench's limit alarms; end None while open."""
    station, zero_s = bench_named(name).station, notes.day_one_us / 1e6
    found = Alarm.objects.filter(tap__station__name=station, kind=AlarmKind.LIMIT, level="alarm").order_by("alarm_at")
    return [(alarm.alarm_at.timestamp() - zero_s, alarm.returned_at and alarm.returned_at.timestamp() - zero_s)
            for alarm in found]


def test_the_laboratory_is_built_judged_and_found_again(settings, tmp_path, capsys):
    settings.DATA_DIR = tmp_path
    lines, started_s = [], time.monotonic()
    login = build_demo_lab(lines.append)
    built_s = time.monotonic() - started_s
    notes = read_notes()
    with capsys.disabled():
        print("", *lines, f"built in {built_s:.1f} s; {_sizes()}", sep="\n  ")

    _check_people(login)
    _check_counts(notes)
    _check_trust(notes)
    _check_alarms(notes)
    _check_rollups(notes)
    _check_second_start(notes, login)


def _sizes():
    with connection.cursor() as cursor:
        cursor.execute("SELECT sum(count), count(*), sum(length(body)) FROM ingest_block")
        readings, blocks, stored = cursor.fetchone()
        cursor.execute("SELECT pg_database_size(current_database())")
        (database,) = cursor.fetchone()
    return f"{readings:,} readings in {blocks:,} blocks of {stored / 1e6:.0f} MB; database {database / 1e6:.0f} MB"


def _check_people(login):
    roles = dict(Person.objects.values_list("username", "role"))
    assert roles == {"maren": "manager", "tobias": "researcher", "asha": "owner", "joren": "researcher", "nadia": "guest"}
    assert Person.objects.get(username=login.name).check_password(login.password)
    assert login.password in login.lines[0]
    assert not has_access(Person.objects.get(username="nadia"))
    assert Station.objects.filter(bench__owner__username="asha").count() == 3


def _check_counts(notes):
    length_s = (notes.built_until_us - notes.day_one_us) / 1e6
    assert 14 * 86400 <= length_s < 21 * 86400
    recent_s = length_s - (length_s // 86400 - 2) * 86400
    expected = recent_s + (length_s - recent_s) / 6.0
    for bench in BENCHES:
        counts = Block.objects.filter(tap__station__name=bench.station).values_list("count", flat=True)
        assert sum(counts) == pytest.approx(expected, rel=0.012), bench.name
    for room in ROOMS:
        counts = Block.objects.filter(tap__station__name=room.station).values_list("count", flat=True)
        assert sum(counts) == pytest.approx(length_s / 10.0, rel=0.001)


def _check_trust(notes):
    er = Quantity.ER_DB
    saturated = _samples(notes, "N4", moment(6, 14, 15), moment(6, 16, 55))
    assert _share_with(saturated, er, Reason.SATURATED) > 0.99
    assert np.all(saturated.trust[er] == Trust.UNTRUSTED)
    assert _share_with(_samples(notes, "N4", moment(6, 12), moment(6, 14)), er, Reason.SATURATED) < 0.001
    frozen = _samples(notes, "S4", moment(7, 1), moment(7, 8, 59))
    assert _share_with(frozen.take(frozen.at_us >= _us(notes, moment(7, 2, 23))), er, Reason.FLAT) == 1.0, "flat within 10 min"
    assert _share_with(frozen.take(frozen.at_us < _us(notes, moment(7, 2, 13))), er, Reason.FLAT) == 0.0
    assert _share_with(_samples(notes, "S4", moment(7, 9, 15), moment(7, 12)), er, Reason.FLAT) == 0.0
    dark = _samples(notes, "S1", moment(10, 1, 31), moment(10, 14, 9))
    assert _share_with(dark, er, Reason.DARK) > 0.99
    assert _share_with(dark, Quantity.POWER_W, Reason.DARK) == 0.0
    clock = _samples(notes, "V1", moment(2, 8, 1), moment(2, 9))
    assert _share_with(clock, er, Reason.CLOCK_UNSET) == 1.0
    assert np.all(clock.trust[er] == Trust.DOUBTFUL)
    assert _share_with(_samples(notes, "V1", moment(2, 7), moment(2, 7, 59)), er, Reason.CLOCK_UNSET) == 0.0
    reboot_s = moment(11, 4, 40)
    assert _share_with(_samples(notes, "N2", reboot_s + 36.0, reboot_s + 74.0), er, Reason.CLOCK_UNSET) == 1.0
    assert _share_with(_samples(notes, "N2", reboot_s + 77.0, reboot_s + 900.0), er, Reason.CLOCK_UNSET) == 0.0
    double = _samples(notes, "S4", moment(13, 15, 1), moment(13, 15, 24))
    assert _share_with(double, er, Reason.TWO_DEVICES) == 1.0
    assert _share_with(_samples(notes, "S4", moment(13, 15, 30), moment(13, 16)), er, Reason.TWO_DEVICES) == 0.0
    assert 0.01 < _share_with(_samples(notes, "S3", moment(2, 0), moment(2, 6)), Quantity.DOP, Reason.DOP_ABOVE_ONE) < 0.4
    assert len(_samples(notes, "S3", moment(12, 1, 1), moment(12, 4, 19))) == 0
    flipped = _samples(notes, "S3", moment(10, 9, 20), moment(10, 12))
    assert np.nanmax(np.degrees(flipped.angle_rad)) < 14.0


def _check_alarms(notes):
    nights = [int((begin_s - 43_200) // 86_400) + 1 for begin_s, _ in _limit_alarms(notes, "N3")]
    assert sorted(set(nights)) == [4, 8, 11]
    assert len(_limit_alarms(notes, "N4")) >= 1
    assert all(moment(9, 13) < begin_s < moment(9, 18) for begin_s, _ in _limit_alarms(notes, "N4"))
    for name in ("N1", "N2", "S1", "V1", "V2", "S3", "S4"):
        assert _limit_alarms(notes, name) == [], name
    creeping = _limit_alarms(notes, "S2")
    assert creeping[0][0] >= moment(12, 20)
    assert creeping[-1][1] is None
    assert [alarm.is_late for alarm in Alarm.objects.filter(returned_at=None)] == [False]
    assert not Alarm.objects.exclude(returned_at=None).filter(is_late=False).exists()
    assert Event.objects.count() == 1, "history calls nobody, save for what is still open: S2"


def _check_rollups(notes):
    for bench in BENCHES:
        tap = Tap.objects.get(station__name=bench.station)
        quantity = "angle_deg" if bench.limit.quantity == "angle_deg" else "er_db"
        shown = history(tap.pk, quantity, notes.day_one_us, notes.built_until_us, points=300)
        known = np.isfinite(shown.mean)
        assert known.mean() > 0.9, bench.name
        assert np.all(shown.min[known] <= shown.mean[known] + 1e-9)
        assert np.all(shown.mean[known] <= shown.max[known] + 1e-9)
    for name, first_s, last_s in (("N4", moment(6, 14, 20), moment(6, 16, 50)), ("S4", moment(7, 2, 30), moment(7, 8, 50)),
                                  ("S1", moment(10, 2), moment(10, 14))):
        tap = Tap.objects.get(station__name=bench_named(name).station)
        shown = history(tap.pk, "er_db", _us(notes, first_s), _us(notes, last_s), points=60)
        assert shown.trusted_share.max() < 0.02, name


def _check_second_start(notes, login):
    before, lines = Block.objects.count(), []
    again = build_demo_lab(lines.append)
    assert again == login
    assert Block.objects.count() == before
    assert read_notes() == notes
    assert any("is there" in line for line in lines)
