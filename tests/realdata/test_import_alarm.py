"""Measured run c through the command, the store and the whole pipeline: one past episode, and nobody is called.

Source of the figures: see test_import_fibre_runs.py; they are those of the plain samples. The pipeline judges the worst sample
of each second: it raises within a second of them, and returns up to two seconds later, for only wholly clear seconds count and
their first samples may lie a little less than 1 s apart.
"""

from datetime import UTC, datetime

import pytest

from analysis.record.calibrations import new_version
from ingest.models import TapKind, Unit
from labmon.alarms.models import Alarm, AlarmKind
from labmon.experiments.actions import set_limit
from labmon.pipeline.process import process_touched
from labmon.tell.models import Message
from tests.factories import make_experiment, make_person, make_tap
from tests.realdata.sets import imported

pytestmark = [pytest.mark.realdata, pytest.mark.django_db]

BEFORE = datetime(2020, 1, 1, tzinfo=UTC)
ZERO = datetime(2025, 2, 28, 14, 48, 5, tzinfo=UTC)


def test_run_c_is_one_late_episode_that_calls_nobody():
    """On-delay 1 s, clear at +1 dB for 1 s: 41.107 to 157.628 s; minimum −3.359 dB."""
    owner = make_person(email="owner@example.org")
    tap = make_tap(kind=TapKind.STOKES, unit=Unit.MILLIWATT, interval_s=None)
    new_version(tap, BEFORE, {"wanted_state": [1.0, 0.0, 0.0]})
    experiment = make_experiment(tap, owner=owner)
    set_limit(experiment, tap, "er_db", alarm=3.0, on_delay_s=1.0, off_delay_s=1.0, deadband=1.0, valid_from=BEFORE, by=owner)
    imported(tap, "fibre_sop_runs/run_c.csv.gz", "fibre_run_c.toml")
    process_touched()
    alarm = Alarm.objects.get(kind=AlarmKind.LIMIT)
    raised_late_s = (alarm.raised_at - ZERO).total_seconds() - 41.107
    returned_late_s = (alarm.returned_at - ZERO).total_seconds() - 157.628
    assert -1.0 <= raised_late_s <= 1.0 and 0.0 <= returned_late_s <= 2.0
    assert alarm.value == pytest.approx(-3.359, abs=1e-3)
    assert alarm.is_late and not Message.objects.exists()
    imported(tap, "fibre_sop_runs/run_c.csv.gz", "fibre_run_c.toml")
    assert process_touched().readings == 0
    assert Alarm.objects.get(kind=AlarmKind.LIMIT).changed == alarm.changed
