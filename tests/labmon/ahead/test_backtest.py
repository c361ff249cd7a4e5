"""The back-test over stored minutes: what it counts equals the warnings that the pipeline raised on the same past."""

import numpy as np
import pytest

from ingest.times import at_of
from labmon.ahead.backtest import score_limits
from labmon.ahead.models import AheadScore
from labmon.alarms.models import Alarm
from labmon.experiments.actions import set_limit
from labmon.pipeline.catch_up import catch_up
from labmon.screen.ahead_view import outlook_words, score_words
from tests.factories import NOON, NOON_US, make_experiment, make_tap, store_readings
from tests.labmon.pipeline.lab import ports_of

pytestmark = pytest.mark.django_db
S, DAY_S = 1_000_000, 86_400
AHEAD = {"alarm": 3600.0, "warning": 7200.0, "on_delay_s": 600, "off_delay_s": 900, "deadband": 1800.0}


def er_of(angle_deg):
    return -20 * np.log10(np.tan(np.radians(angle_deg) / 2))


@pytest.fixture
def past(monkeypatch):
    """Two days, read each minute: 3° for 8 h, up to 13° in 5 h, back at once; thrice, the third time turned round at 9°."""
    rise = np.concatenate([np.full(480, 3.0), np.linspace(3.0, 13.0, 300)])
    turned = np.concatenate([np.full(480, 3.0), np.linspace(3.0, 9.5, 195), np.linspace(9.5, 3.0, 30), np.full(300, 3.0)])
    angle = np.concatenate([rise, rise, turned]) + np.random.default_rng(1).normal(0, 0.02, 2 * 780 + len(turned))
    now_us = NOON_US + len(angle) * 60 * S
    monkeypatch.setattr("django.utils.timezone.now", lambda: at_of(now_us))
    tap = make_tap(interval_s=60.0)
    experiment = make_experiment(tap)
    host = set_limit(experiment, tap, "er_db", alarm=20.0, on_delay_s=0, valid_from=NOON, by=None).limit
    trend = set_limit(experiment, tap, "time_to_limit_s", valid_from=NOON, by=None, **AHEAD).limit
    index = np.arange(len(angle))
    store_readings(tap, NOON_US + index * 60 * S, sequence=index, boot="b", **ports_of(er_of(angle)))
    catch_up(now_us)
    return now_us, host, trend, experiment, tap


def test_counts_equal_what_the_pipeline_raised(past):
    now_us, host, trend, _, _ = past
    assert score_limits(now_us) == 1 and score_limits(now_us) == 0
    score = AheadScore.objects.get(limit=host)
    assert score.warnings + score.open_ended == Alarm.objects.filter(limit=trend).count() == 3
    assert (score.came_true, score.warnings, score.passings, score.warned_of) == (2, 3, 2, 2)
    assert 3600 < score.median_lead_s < 7300
    said = score_words(score)
    assert "3 warnings below 2\N{NO-BREAK SPACE}h" in said and "1 false call (33 %, 95 % interval" in said


def test_a_new_rule_or_level_or_a_day_makes_it_due_again(past):
    now_us, host, _, experiment, tap = past
    score_limits(now_us)
    set_limit(experiment, tap, "er_db", alarm=25.0, by=None)
    assert score_limits(now_us) == 1 and AheadScore.objects.get(limit=host).basis["toward"] == 25.0
    assert score_limits(now_us + DAY_S * S) == 0 and score_limits(now_us + (DAY_S + 1) * S) == 1


def test_words_of_the_outlook(past):
    now_us, host, _, _, _ = past
    said = outlook_words(host.outlook, at_of(now_us))
    assert "not within" in said and "left" in said
    assert outlook_words(None, at_of(now_us)) == ""
    assert "since then nothing was read" in outlook_words(host.outlook, at_of(now_us + 3600 * S))


def test_pages_say_it(past, client):
    from tests.factories import make_person
    now_us, _, _, experiment, tap = past
    score_limits(now_us)
    client.force_login(make_person())
    for address in (f"/experiments/{experiment.pk}/", f"/stations/{tap.station.name}/"):
        said = " ".join(client.get(address).content.decode().split())
        assert "Recent drift (3 h 00)" in said and "Back-tested over" in said and "1 false call (33 %" in said
    lab = " ".join(client.get("/").content.decode().split())
    assert "Warnings ahead" not in lab  # withdrawn hours ago
    Alarm.objects.filter(quantity="time_to_limit_s").update(returned_at=at_of(now_us - 600 * S))
    lab = " ".join(client.get("/").content.decode().split())
    assert "Warnings ahead" in lab and "it no longer holds" in lab and "Of 3 such warnings" in lab
