"""Alarms in words."""

from datetime import UTC, datetime, timedelta

import pytest

from labmon.alarms.queries import AlarmRow
from labmon.screen.alarm_view import STATE_WORDS, alarm_title, alarm_view, alarms_sentence, since_text

NOW = datetime(2031, 3, 4, 2, 23, tzinfo=UTC)


def row(**fields) -> AlarmRow:
    """An alarm raised twelve minutes ago."""
    usual = {
        "id": 1,
        "kind": "limit",
        "experiment": "EOM input",
        "experiment_id": 3,
        "tap": "n2/eom-in",
        "tap_id": 7,
        "station": "n2",
        "quantity": "er_db",
        "level": "alarm",
        "state": "unacknowledged",
        "raised_at": NOW - timedelta(minutes=12),
        "alarm_at": NOW,
        "returned_at": None,
        "acknowledged_at": None,
        "acknowledged_by": None,
        "note": "",
        "value": 19.1,
        "limit": 20.0,
        "cause": "",
        "message": "",
        "is_late": False,
        "is_withdrawn": False,
        "shelved_until": None,
        "earlier_bounds": [],
    }
    return AlarmRow(**(usual | fields))


@pytest.mark.parametrize(
    ("fields", "title"),
    [
        ({}, "n2/eom-in: worst 19.1 dB (12.7°), below its limit 20.0 dB (11.4°)"),
        (
            {"quantity": "angle_deg", "value": 38.0, "limit": 36.0},
            "n2/eom-in: worst 38.0° (9.3 dB), above its limit 36.0° (9.8 dB)",
        ),
        (
            {"level": "warning", "value": 22.0, "limit": 23.0},
            "n2/eom-in: worst 22.0 dB (9.1°), below its warning level 23.0 dB (8.1°)",
        ),
        ({"quantity": "power_w", "value": 5e-4, "limit": 1e-3}, "n2/eom-in: worst 500 µW, below its limit 1.00 mW"),
        ({"kind": "no-reading", "quantity": "", "value": None}, "n2/eom-in: no reading"),
        ({"kind": "untrusted", "quantity": "", "cause": "saturated"}, "n2/eom-in: readings untrusted, saturated"),
    ],
)
def test_what_happened_in_one_line(fields, title):
    assert alarm_title(row(**fields)).replace("\xa0", " ") == title


def test_an_open_alarm_waits():
    view = alarm_view(row(), NOW)
    assert (view.is_open, view.is_waiting, view.shape) == (True, True, "mark-below")
    assert view.lasted.replace("\xa0", " ") == "open for 12 min"


def test_who_acknowledged_and_when():
    view = alarm_view(row(state="acknowledged", acknowledged_at=NOW, acknowledged_by="tobias", note="on my way"), NOW)
    assert view.acknowledged == "acknowledged by tobias at 2031-03-04 02:23:00"
    assert not view.is_waiting


@pytest.mark.parametrize(
    ("states", "sentence"),
    [
        ([], "No alarm is open and none waits for someone."),
        (["unacknowledged"], "1 alarm waits for someone, the oldest since 02:11 UTC."),
        (["acknowledged"], "1 alarm open, all acknowledged."),
    ],
)
def test_the_list_in_one_sentence(states, sentence):
    assert alarms_sentence([alarm_view(row(state=state), NOW) for state in states], is_filtered=False) == sentence


def test_what_came_back_by_itself_is_said():
    views = [alarm_view(row(), NOW), alarm_view(row(state="returned-unacknowledged", returned_at=NOW), NOW)]
    assert alarms_sentence(views, is_filtered=False).endswith("1 of them came back by itself.")


def test_a_withdrawn_alarm_is_not_open():
    assert not alarm_view(row(is_withdrawn=True, state="normal"), NOW).is_open


def test_old_times_carry_their_date():
    assert since_text(NOW - timedelta(hours=3), NOW) == "23:23"
    assert since_text(NOW - timedelta(days=3), NOW) == "2031-03-01 02:23"


def test_every_state_has_words():
    from labmon.alarms.models import AlarmState

    assert set(STATE_WORDS) == set(AlarmState.values)
