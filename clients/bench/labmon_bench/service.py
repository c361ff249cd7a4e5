"""The files that make the operating system start the client and keep it running."""

from __future__ import annotations

import getpass
import plistlib
import subprocess
import sys
from pathlib import Path
from xml.sax.saxutils import escape

NAME = "labmon-bench"
SYSTEMS = ("systemd", "windows", "launchd")


def service_command(settings: Path) -> list[str]:
    """What the system is to start: this Python with this client, be it a package or one copied file."""
    itself = Path(getattr(sys.modules["__main__"], "__file__", None) or sys.argv[0]).absolute()
    client = [str(itself)] if itself.name != "__main__.py" else ["-m", "labmon_bench"]
    return [sys.executable, *client, "run", str(settings.absolute())]


def service_text(system: str, settings: Path, command: list[str], user: str = "") -> str:
    """The file for one system."""
    makers = {"systemd": systemd_unit, "windows": windows_task, "launchd": launchd_plist}
    return makers[system](settings.absolute(), command, user or getpass.getuser())


def service_remedy(system: str, settings: Path) -> str:
    """What to do with the file, for a person."""
    return {
        "systemd": f"Save it as /etc/systemd/system/{NAME}.service, then: systemctl daemon-reload; systemctl enable --now {NAME}",
        "windows": f"Save it with --write {NAME}.xml, then as administrator: schtasks /Create /TN {NAME} /XML {NAME}.xml "
                   f"/RU SYSTEM, and: schtasks /Run /TN {NAME}",
        "launchd": "Save it as /Library/LaunchDaemons/org.labmon.bench.plist, then: sudo launchctl bootstrap system "
                   "/Library/LaunchDaemons/org.labmon.bench.plist",
    }[system]


def systemd_unit(settings: Path, command: list[str], user: str) -> str:
    """A unit that starts again after a crash, for ever, and may write only where the settings lie."""
    words = " ".join(_systemd_word(word) for word in command)
    return f"""[Unit]
Description=Sends the readings of an optical bench to labmon
After=network-online.target time-sync.target
Wants=network-online.target
StartLimitIntervalSec=0

[Service]
ExecStart={words}
WorkingDirectory={_systemd_path(settings.parent)}
User={user}
Restart=always
RestartSec=5
KillSignal=SIGTERM
TimeoutStopSec=20
NoNewPrivileges=yes
ProtectSystem=full
PrivateTmp=yes

[Install]
WantedBy=multi-user.target
"""


def windows_task(settings: Path, command: list[str], user: str) -> str:
    """A task that starts with the machine, without a time limit, and again a minute after a crash; ``schtasks`` reads it."""
    arguments = subprocess.list2cmdline(command[1:])
    return f"""<?xml version="1.0" encoding="UTF-16"?>
<Task version="1.2" xmlns="http://schemas.microsoft.com/windows/2004/02/mit/task">
  <RegistrationInfo>
    <Description>Sends the readings of an optical bench to labmon</Description>
  </RegistrationInfo>
  <Triggers>
    <BootTrigger>
      <Enabled>true</Enabled>
      <Delay>PT15S</Delay>
    </BootTrigger>
  </Triggers>
  <Principals>
    <Principal id="Author">
      <UserId>S-1-5-18</UserId>
      <RunLevel>LeastPrivilege</RunLevel>
    </Principal>
  </Principals>
  <Settings>
    <MultipleInstancesPolicy>IgnoreNew</MultipleInstancesPolicy>
    <DisallowStartIfOnBatteries>false</DisallowStartIfOnBatteries>
    <StopIfGoingOnBatteries>false</StopIfGoingOnBatteries>
    <StartWhenAvailable>true</StartWhenAvailable>
    <IdleSettings>
      <StopOnIdleEnd>false</StopOnIdleEnd>
      <RestartOnIdle>false</RestartOnIdle>
    </IdleSettings>
    <ExecutionTimeLimit>PT0S</ExecutionTimeLimit>
    <Priority>5</Priority>
    <RestartOnFailure>
      <Interval>PT1M</Interval>
      <Count>999</Count>
    </RestartOnFailure>
  </Settings>
  <Actions Context="Author">
    <Exec>
      <Command>{escape(command[0])}</Command>
      <Arguments>{escape(arguments)}</Arguments>
      <WorkingDirectory>{escape(str(settings.parent))}</WorkingDirectory>
    </Exec>
  </Actions>
</Task>
"""


def launchd_plist(settings: Path, command: list[str], user: str) -> str:
    """A property list for macOS that keeps the client alive."""
    return plistlib.dumps({"Label": "org.labmon.bench", "ProgramArguments": command, "WorkingDirectory": str(settings.parent),
                           "UserName": user, "RunAtLoad": True, "KeepAlive": True, "ThrottleInterval": 5}).decode()


def _systemd_word(word: str) -> str:
    escaped = word.replace("\\", "\\\\").replace('"', '\\"').replace("%", "%%").replace("$", "$$")
    return f'"{escaped}"' if any(sign in word for sign in " \"'\\") or not word else escaped


def _systemd_path(path: Path) -> str:
    return str(path).replace("%", "%%")
