"""A proposed limit over the API: anyone who sees the experiment may try; nothing is written."""

import numpy as np
import pytest

from ingest.times import now_us
from labmon.experiments.models import LimitVersion
from tests.labmon.api.conftest import write


@pytest.fixture
def address(lab):
    return f"/api/v1/experiments/{lab.experiment.pk}/limits/rehearse"


def test_what_it_would_have_raised(lab, address):
    dark = np.full(600, 1e-6)
    dark[100:300] = 1e-4
    write(lab.tap, from_us=now_us() // 10**6 * 10**6 - 700 * 10**6, port1=np.full(600, 1e-3), port2=dark)
    body = {"tap": "bench-a/in", "quantity": "er_db", "alarm": 20.0, "hard": 15.0, "days": 1}
    for caller in (lab.guest, lab.researcher, lab.owner):
        said = caller.post(address, body).json()
        assert said["count"] == 1 and said["calls"][0]["lead_s"] == -60.0 and said["open_s"] == 200.0
    assert not LimitVersion.objects.exists() and lab.nobody.post(address, body).status_code == 401


@pytest.mark.parametrize(("change", "field"), [
    ({"days": 32}, "days"), ({"days": 0}, "days"), ({"alarm": 500.0}, "alarm"), ({"warning": 10.0}, "warning"),
    ({"quantity": "dop"}, "quantity"), ({"tap": "bench-a/none"}, "tap"), ({"on_delay_s": -1.0}, "on_delay_s")])
def test_the_field_at_fault_is_named(lab, address, change, field):
    answer = lab.owner.post(address, {"tap": "bench-a/in", "quantity": "er_db", "alarm": 20.0} | change)
    assert (answer.status_code, answer.json()["field"]) == (400, field)
