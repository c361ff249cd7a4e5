"""Runs and their ledgers as frames."""

import numpy as np
import pandas as pd
from labmon_notebook.lab import Lab

from labmon.people.keys import make_person_key
from labmon.people.models import Role
from tests.clients.notebook.conftest import NearDoor
from tests.factories import make_person
from tests.labmon.evidence.conftest import ledger_of, ten_hours  # noqa: F401  JOB 7a's ten hours


def test_a_ledger_comes_as_stretches_with_totals(ten_hours, monkeypatch):  # noqa: F811
    """Hand count: 9 h good, 20 min below, 30 min missing, 10 min untrusted; also page by page."""
    ledger_of(ten_hours)
    lab = Lab("", door=NearDoor(make_person_key(make_person(Role.RESEARCHER), by=None)[1]))
    monkeypatch.setattr("labmon.api.run_ledgers.MOST_INTERVALS", 3)
    frame = lab.ledger(ten_hours.pk)
    assert frame.groupby("class")["length_s"].sum().to_dict() == {"good": 32_400, "below limit": 1200, "no reading": 1800,
                                                                  "untrusted": 600}
    assert frame.attrs["good_s"] == 32_400 and frame.attrs["version"] == 1 and str(frame.index.dtype) == "datetime64[us, UTC]"
    assert frame.index[0] == pd.Timestamp("2024-03-04T12:00Z")
    assert (frame["until"].to_numpy()[:-1] == frame.index.to_numpy()[1:]).all()
    runs = lab.runs()
    assert runs.loc[ten_hours.pk, "state"] == "over" and runs.loc[ten_hours.pk, "taps"] == "bench-a/in"
    assert np.isclose(runs.loc[ten_hours.pk, "length_s"], 36_000)
