"""The files for the operating system are of the form it reads."""

import plistlib
import shutil
import subprocess
import sys
import xml.etree.ElementTree
from pathlib import Path

import pytest
from labmon_bench.__main__ import main
from labmon_bench.service import launchd_plist, systemd_unit, windows_task

from tests.clients.bench.conftest import ONE_FILE, write_settings

ODD = Path("/opt/bench 7/50 % & more/bench.ini")
COMMAND = [sys.executable, "/opt/bench 7/labmon_bench.py", "run", str(ODD)]


def test_systemd_itself_finds_no_fault(tmp_path):
    if shutil.which("systemd-analyze") is None:
        pytest.skip("systemd-analyze is not here")
    unit = tmp_path / "labmon-bench.service"
    unit.write_text(systemd_unit(ODD, COMMAND, "root"))
    done = subprocess.run(["systemd-analyze", "verify", "--man=no", unit], capture_output=True, text=True)
    assert (done.returncode, [line for line in done.stderr.splitlines() if "labmon-bench" in line]) == (0, [])


def test_the_unit_starts_again_for_ever():
    text = systemd_unit(ODD, COMMAND, "bench")
    assert "Restart=always\n" in text and "StartLimitIntervalSec=0\n" in text and "User=bench\n" in text
    words = '"/opt/bench 7/labmon_bench.py" run "/opt/bench 7/50 %% & more/bench.ini"'
    assert f"ExecStart={sys.executable} {words}\n" in text


def test_the_windows_task_is_well_formed_and_without_a_time_limit():
    name = "{http://schemas.microsoft.com/windows/2004/02/mit/task}"
    task = xml.etree.ElementTree.fromstring(windows_task(ODD, COMMAND, "").encode("utf-16"))
    assert task.tag == name + "Task" and task.find(f".//{name}BootTrigger") is not None
    assert task.findtext(f".//{name}ExecutionTimeLimit") == "PT0S" and task.findtext(f".//{name}Command") == sys.executable
    assert task.findtext(f".//{name}Arguments") == f'"/opt/bench 7/labmon_bench.py" run "{ODD}"'
    parts = [child.tag.removeprefix(name) for child in task]
    assert parts == ["RegistrationInfo", "Triggers", "Principals", "Settings", "Actions"]


def test_the_property_list_is_one():
    found = plistlib.loads(launchd_plist(ODD, COMMAND, "bench").encode())
    assert found["ProgramArguments"] == COMMAND and found["KeepAlive"] is True


def test_the_command_writes_them(tmp_path, capsys):
    settings = write_settings(tmp_path, 1, "k", ["[tap eom-in]", "source = stdin", "columns = port1 port2"])
    assert main(["service", "windows", str(settings), "--write", str(tmp_path / "task.xml")]) == 0
    assert (tmp_path / "task.xml").read_bytes()[:2] in (b"\xff\xfe", b"\xfe\xff")
    assert "schtasks /Create" in capsys.readouterr().err
    done = subprocess.run([sys.executable, "-I", ONE_FILE, "service", "systemd", settings], capture_output=True, text=True,
                          check=True)
    assert f"ExecStart={sys.executable} {ONE_FILE} run {settings}\n" in done.stdout and "systemctl enable" in done.stderr
