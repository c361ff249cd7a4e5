"""What a lab that was killed may have left: a running server, a pid file that names a stranger."""

import os
import shutil
import signal
import subprocess
import time
from pathlib import Path

NO_PROCESS = 2**22 + 1        # above Linux's largest process number (PID_MAX_LIMIT, proc(5)) and macOS's
GONE_WITHIN_S = 10.0


def is_alive(pid: int) -> bool:
    """Whether a process of that number runs (one that has ended and only waits to be counted does not)."""
    try:
        if (Path("/proc") / str(pid) / "stat").read_text().rsplit(")", 1)[1].split()[0] == "Z":
            return False
    except OSError:
        pass                            # not Linux, or gone: the next question tells
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def is_postgres_of(pid: int, cluster: Path) -> bool:
    """Whether the process is really a PostgreSQL server on this cluster (it works inside its folder)."""
    process = Path("/proc") / str(pid)
    if process.is_dir():
        try:
            command = (process / "cmdline").read_bytes().split(b"\0")[0]
            return b"postgres" in command and (process / "cwd").resolve() == cluster.resolve()
        except OSError:
            return False
    said = subprocess.run(["ps", "-p", str(pid), "-o", "command="], capture_output=True, text=True).stdout
    return "postgres" in said and str(cluster) in said


def clear_postgres(cluster: Path) -> None:
    """Stop a server left over on ``cluster``; make a pid file that names a stranger harmless.

    The file is kept, only its process number is replaced: PostgreSQL also reads from it whether old server processes
    still hold its shared memory, and that check must stay.
    """
    pid_file = cluster / "postmaster.pid"
    lines = pid_file.read_text().splitlines() if pid_file.is_file() else []
    if not lines or not lines[0].strip().lstrip("-").isdigit():
        return
    pid = abs(int(lines[0]))
    if not is_alive(pid):
        return
    if is_postgres_of(pid, cluster):
        end(pid)
        return
    pid_file.write_text("\n".join([str(NO_PROCESS), *lines[1:]]) + "\n")


def end(pid: int) -> None:
    """Fast shutdown, after a while the immediate one."""
    for number in (signal.SIGINT, signal.SIGQUIT):
        until = time.monotonic() + GONE_WITHIN_S
        try:
            os.kill(pid, number)
        except ProcessLookupError:
            return
        while time.monotonic() < until:
            if not is_alive(pid):
                return
            time.sleep(0.05)


def remove_tree(path: Path) -> None:
    """Remove a folder of ours, if there."""
    if path.exists():
        shutil.rmtree(path)
