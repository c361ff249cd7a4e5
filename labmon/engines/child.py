"""One child process that dies with us, and how it is started and stopped."""

import os
import signal
import subprocess
import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import IO

LAUNCHER = Path(__file__).with_name("launch.py")


@dataclass(frozen=True, slots=True)
class Identity:
    """Who a program runs as: ``same``, ``namespace`` or ``UID:GID`` (launch.py)."""

    user: str = "same"

    @property
    def owner(self) -> tuple[int, int] | None:
        """User and group number to which its files must belong, where they differ from ours."""
        if ":" not in self.user:
            return None
        uid, gid = self.user.split(":")
        return int(uid), int(gid)


SAME = Identity()


def launched(command: Sequence[str | Path], *, identity: Identity = SAME,
             death_signal: signal.Signals = signal.SIGTERM) -> list[str]:
    """The command line that runs ``command`` through the launcher; the caller is the parent it dies with.

    On Linux the parent is the *thread* that starts it (prctl(2), PR_SET_PDEATHSIG): start it from one that lives on.
    """
    return [sys.executable, "-I", "-S", str(LAUNCHER), "--parent", str(os.getpid()),
            "--death-signal", str(int(death_signal)), "--user", identity.user, "--", *map(str, command)]


def start(command: Sequence[str | Path], *, log: IO[bytes] | int, identity: Identity = SAME,
          death_signal: signal.Signals = signal.SIGTERM, environ: Mapping[str, str] | None = None,
          folder: Path | None = None, open_files: Sequence[int] = ()) -> subprocess.Popen[bytes]:
    """Start a child in a group of its own, so that Ctrl-C reaches the supervisor only."""
    return subprocess.Popen(launched(command, identity=identity, death_signal=death_signal), stdin=subprocess.DEVNULL,
                            stdout=log, stderr=subprocess.STDOUT, env=environ, cwd=folder, pass_fds=open_files,
                            start_new_session=True)


def can_reach(path: Path, identity: Identity) -> bool:
    """Whether ``identity`` may enter (a folder) or run (a file) ``path``; False too where it cannot be taken on."""
    command = launched([], identity=identity)[:-1] + ["--reach", str(path)]
    return subprocess.run(command, capture_output=True, stdin=subprocess.DEVNULL, cwd="/").returncode == 0


def stop(process: subprocess.Popen[bytes], *, how: signal.Signals, within_s: float) -> bool:
    """Send ``how`` and wait; kill after ``within_s``. True if it went by itself."""
    if process.poll() is not None:
        return True
    process.send_signal(how)
    try:
        process.wait(within_s)
        return True
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()
        return False
