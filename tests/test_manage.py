"""``--data`` anywhere after the command names the lab's folder before the settings are read."""

import subprocess
import sys
from pathlib import Path

import pytest

from manage import without_folder

MANAGE = Path(__file__).resolve().parents[1] / "manage.py"


@pytest.mark.parametrize(("words", "kept", "folder"), [
    (["migrate"], ["migrate"], None),
    (["run_lab", "--data", "d", "--demo"], ["run_lab", "--demo"], "d"),
    (["run_lab", "--data=a b"], ["run_lab"], "a b"),
    (["x", "--database", "other"], ["x", "--database", "other"], None),
    (["x", "--", "--data", "d"], ["x", "--", "--data", "d"], None),
    (["x", "--data", "a", "--data", "b"], ["x"], "b"),
])
def test_folder_is_taken_out(words, kept, folder):
    assert without_folder(words) == (kept, folder)


def test_missing_folder_is_said():
    with pytest.raises(SystemExit, match="--data DIR"):
        without_folder(["run_lab", "--data"])


def test_settings_see_the_folder(tmp_path):
    words = [sys.executable, MANAGE, "shell", "--data", tmp_path / "lab", "-v", "0", "-c",
             "from django.conf import settings; print(settings.DATA_DIR)"]
    said = subprocess.run(words, capture_output=True, text=True, check=True, cwd=tmp_path)
    assert said.stdout.strip() == str(tmp_path / "lab")
