"""Where measured readings lie that are not part of the project (their licences do not allow it)."""

import os
from pathlib import Path

import pandas as pd
import pytest

REPOSITORY = Path(__file__).resolve().parents[2]


def folder() -> Path:
    """The folder named by LABMON_REALDATA, default ../shared/data beside the repository."""
    return (REPOSITORY / os.environ.get("LABMON_REALDATA", "../shared/data")).resolve()


def table(name: str) -> pd.DataFrame:
    """A measured table; the test is skipped, saying why, where the file is absent."""
    path = folder() / name
    if not path.exists():
        pytest.skip(f"measured data are absent: {name} is not in the folder of LABMON_REALDATA")
    return pd.read_csv(path)
