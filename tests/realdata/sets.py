"""Where the measured sets lie: LABMON_REALDATA, else ../shared/data beside the repository."""

import json
import os
from io import StringIO
from pathlib import Path

import pandas as pd
import pytest
from django.core.management import call_command

from ingest.models import Tap
from ingest.store.columns import Readings
from ingest.store.read import read_readings

ROOT = Path(__file__).resolve().parents[2]
FOLDER = Path(os.environ.get("LABMON_REALDATA") or ROOT / "../shared/data").resolve()
MAPPINGS = Path(__file__).parent / "mappings"


def measured(name: str) -> Path:
    """A measured file; skips the test where it is absent."""
    path = FOLDER / name
    if not path.is_file():
        pytest.skip(f"the measured readings are not here ({FOLDER / name}); set LABMON_REALDATA to the folder of the sets")
    return path


def table(name: str) -> pd.DataFrame:
    """The file as pandas reads it, apart from our own reader."""
    return pd.read_csv(measured(name))


def imported(tap: Tap, name: str, mapping: str) -> dict[str, int]:
    """The counts that ``manage.py import_csv`` prints."""
    out = StringIO()
    call_command("import_csv", str(measured(name)), station=tap.station.name, tap=tap.name, mapping=MAPPINGS / mapping,
                 stdout=out, stderr=StringIO())
    return json.loads(out.getvalue().splitlines()[-1])


def all_readings(tap: Tap) -> Readings:
    """Everything the store holds of the tap."""
    return read_readings(tap.pk, 0, 2**62)
