"""Calibrating a tap as a person: the version and its audit row together."""

from datetime import datetime
from typing import Any

from django.db import transaction

from analysis.models import Calibration
from analysis.record.calibrations import FIELDS, CalibrationError, new_version, version_at
from ingest.models import Tap
from labmon.audit.actions import note
from labmon.errors import WriteError
from labmon.live.publish import publish
from labmon.people.models import Person


@transaction.atomic
def set_calibration(
    tap: Tap, valid_from: datetime, changes: dict[str, Any], *, by: Person | None, reason: str = ""
) -> Calibration:
    """A new version that holds from ``valid_from``; fields left out stay as they were then.

    Raises:
        WriteError: A field is unknown or cannot be meant.
    """
    before = version_at(tap.pk, valid_from)
    try:
        version = new_version(tap, valid_from, changes, by=by.username if by else "")
    except CalibrationError as fault:
        raise WriteError(fault.field, fault.why, fault.do) from fault
    note(by, "set calibration", tap, calibration_facts(before) if before else None, calibration_facts(version), reason)
    publish({"kind": "calibration", "ids": [tap.pk]})
    return version


def calibration_facts(version: Calibration) -> dict[str, Any]:
    """A version's fields by their contract names."""
    return {"valid_from": version.valid_from} | {field: getattr(version, field) for field in FIELDS}


def calibration_history(tap: Tap) -> list[Calibration]:
    """All versions ever entered, newest validity first, later entries before earlier ones."""
    return list(tap.calibrations.order_by("-valid_from", "-entered_at", "-pk"))
