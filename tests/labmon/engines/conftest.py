"""Short data folders (a Unix socket's address is short) and throw-away settings."""

import shutil
import tempfile
from pathlib import Path

import pytest

from labmon.engines.folder import DataFolder


@pytest.fixture
def folder():
    """A fresh data folder, held."""
    path = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    data = DataFolder(path / "d")
    data.make()
    data.hold()
    yield data
    data.release()
    shutil.rmtree(path)
