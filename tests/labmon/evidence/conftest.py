"""Runs with known seconds, written as packages and unpacked again."""

import io
import zipfile
from datetime import UTC, datetime, timedelta

import numpy as np
import pytest

from analysis.models import Calibration
from ingest.store.append import write_blocks
from ingest.times import at_of
from labmon.evidence import facts
from labmon.evidence.package import Order, write_evidence
from labmon.experiments.models import Limit, LimitVersion
from labmon.people.models import Role
from labmon.runs.ledgers import ask_ledger
from labmon.runs.making import make_ledger
from labmon.runs.models import Run, RunLimit, RunTap
from tests.factories import make_experiment, make_person, make_station, make_tap

SECOND_US = 1_000_000
HOUR, MINUTE = 3600, 60
MADE_AT = datetime(2024, 3, 6, 9, tzinfo=UTC)
#: A run must be over before its ledger is made.
NOON_US = int(datetime(2024, 3, 4, 12, tzinfo=UTC).timestamp()) * SECOND_US


def run_of(*taps, length_s, limits=(("er_db", 20.0),), from_us=NOON_US, **more):
    """A declared run of the taps from noon on, with limits that were in force long before."""
    experiment = make_experiment(*taps, owner=make_person(Role.OWNER), name=more.pop("experiment", "trap loading"))
    run = Run.objects.create(experiment=experiment, name=more.pop("name", "Rb scan 14"), starts_at=at_of(from_us),
                             ends_at=at_of(from_us) + timedelta(seconds=length_s), limits_noted_at=at_of(from_us), **more)
    for tap in taps:
        RunTap.objects.create(run=run, tap=tap)
        for quantity, alarm in limits:
            rule(run, tap, quantity, alarm, at_of(from_us))
    return run


def rule(run, tap, quantity, alarm, from_at):
    """A version that rules in the run from a moment on."""
    limit, _ = Limit.objects.get_or_create(experiment=run.experiment, tap=tap, quantity=quantity)
    version = LimitVersion.objects.create(limit=limit, number=limit.versions.count() + 1, valid_from=from_at, alarm=alarm,
                                          reason="the trap needs it")
    RunLimit.objects.update_or_create(run=run, limit_version=version, defaults={"from_at": from_at})
    return version


def write_er(tap, at_s, er_db, *, from_us=NOON_US, boot="boot-1", **more):
    """Two-port readings of these ratios at these seconds; the bright port flickers a little."""
    at_s, er_db = np.asarray(at_s, float), np.broadcast_to(np.asarray(er_db, float), np.shape(at_s))
    random = np.random.default_rng(7)
    port1 = 1e-3 * (1 + 0.001 * random.standard_normal(len(at_s)))
    columns = {"port1": port1, "port2": port1 / 10 ** (er_db / 10)} | more
    at_us = from_us + np.round(at_s * SECOND_US).astype(np.int64)
    write_blocks(tap, at_us, columns, boot=boot, sequence=np.arange(len(at_s)), arrival_us=at_us + 500_000)


def calibrate(tap, valid_from=NOON_US - HOUR * SECOND_US, **fields):
    """A version of the calibration as it is stored."""
    return Calibration.objects.create(tap=tap, valid_from=at_of(valid_from), **fields)


def ledger_of(run, **edits):
    """The next version of the run's ledger, made."""
    ledger = ask_ledger(run, by=None, reason="a test", **edits)
    make_ledger(ledger)
    ledger.refresh_from_db()
    return ledger


def written(run, **edits):
    """The package's bytes, and the totals of the ledger that it goes with."""
    file, ledger = io.BytesIO(), ledger_of(run, **edits)
    write_evidence(file, Order(ledger, 1, MADE_AT))
    return file.getvalue(), facts.totals_of(ledger)


def unpacked(content, folder):
    """The bag's folder on disk."""
    with zipfile.ZipFile(io.BytesIO(content)) as package:
        package.extractall(folder)
    (bag,) = folder.iterdir()
    return bag


@pytest.fixture
def ten_hours(db):
    """JOB 7a, row 11: 10 h at 1 Hz with 20 min below, a gap of 30 min, 10 min saturated."""
    tap = make_tap(make_station("bench-a"), "in", interval_s=1.0)
    calibrate(tap, saturation1=5e-3)
    er_db = np.full(10 * HOUR, 30.0)
    er_db[HOUR:HOUR + 20 * MINUTE] = 19.0
    at_s = np.delete(np.arange(10 * HOUR), np.arange(3 * HOUR, 3 * HOUR + 30 * MINUTE))
    clipped = ((at_s >= 5 * HOUR) & (at_s < 5 * HOUR + 10 * MINUTE)).astype(float)
    write_er(tap, at_s, er_db[at_s], clipped=clipped)
    return run_of(tap, length_s=10 * HOUR)
