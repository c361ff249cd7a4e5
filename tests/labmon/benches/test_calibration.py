import pytest

from labmon.audit.models import AuditEntry
from labmon.benches.calibration import calibration_history, set_calibration
from labmon.errors import WriteError
from tests.factories import NOON, make_person, make_tap

pytestmark = pytest.mark.django_db


def test_version_and_audit_row_stand_together():
    tap, person = make_tap(), make_person(username="maren")
    set_calibration(tap, NOON, {"zero2": 1e-9}, by=person, reason="beam blocked")
    version = set_calibration(tap, NOON, {"zero2": 2e-9}, by=person)
    assert version.entered_by == "maren"
    first, second = AuditEntry.objects.order_by("pk")
    assert (first.before, first.after["zero2"], first.reason) == (None, 1e-9, "beam blocked")
    assert (second.before["zero2"], second.after["zero2"]) == (1e-9, 2e-9)
    assert [one.zero2 for one in calibration_history(tap)] == [2e-9, 1e-9]


def test_fault_names_the_field_and_leaves_nothing():
    with pytest.raises(WriteError) as refused:
        set_calibration(make_tap(), NOON, {"leakage": [[1, 1], [1, 1]]}, by=None)
    assert refused.value.field == "leakage" and not AuditEntry.objects.exists()
