"""One part of the running lab: how it is started, watched, restarted and stopped."""

import os
import signal
import subprocess
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Protocol

from labmon.engines import child
from labmon.engines.faults import EngineFault

FIRST_PAUSE_S = 0.5
LONGEST_PAUSE_S = 30.0
STEADY_AFTER_S = 60.0


class Part(Protocol):
    """What the supervisor knows of a part."""

    name: str
    process: subprocess.Popen[bytes] | None

    def start(self) -> None:
        """Start it, or raise EngineFault."""


class Command:
    """A program of ours (web, worker, beat) run as a child.

    Args:
        name: As shown on the terminal; its log is ``NAME.log``.
        words: The command line.
        folder: Where it runs, the project.
        logs: Folder of the logs.
        open_files: Numbers of open files that it inherits.
    """

    def __init__(self, name: str, words: Sequence[str], *, folder: Path, logs: Path,
                 open_files: tuple[int, ...] = ()) -> None:
        self.name = name
        self.words = words
        self.folder = folder
        self.log_path = logs / f"{name}.log"
        self.open_files = open_files
        self.process: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        """Start it; it inherits our environment."""
        with self.log_path.open("ab") as log:
            self.process = child.start(self.words, log=log, folder=self.folder, open_files=self.open_files)

    def is_running(self) -> bool:
        """Whether it was started and has not ended."""
        return self.process is not None and self.process.poll() is None

    def ask_to_stop(self) -> None:
        """SIGTERM: finish what is begun."""
        if self.process is not None and self.is_running():
            self.process.send_signal(signal.SIGTERM)

    def make_stop(self) -> None:
        """Kill it with everything it has started."""
        if self.process is not None:
            try:
                os.killpg(self.process.pid, signal.SIGKILL)
            except (ProcessLookupError, PermissionError):
                pass                    # the whole group is gone already
            self.process.wait()


class Watch:
    """Keeps one part running: a part that ends is started again, after pauses that double up to half a minute."""

    def __init__(self, part: Part, say: Callable[[str, str], None], clock: Callable[[], float] = time.monotonic) -> None:
        self.part = part
        self.say = say
        self.clock = clock
        self.pause_s = FIRST_PAUSE_S
        self.started_s = clock()
        self.due_s: float | None = None

    def look(self) -> None:
        """Start the part again if it has ended and its pause is over."""
        if self.due_s is None and self.part.process is not None and self.part.process.poll() is not None:
            self._plan(f"ended with status {self.part.process.returncode}")
        elif self.due_s is not None and self.clock() >= self.due_s:
            self._restart()

    def _plan(self, why: str) -> None:
        if self.clock() - self.started_s >= STEADY_AFTER_S:
            self.pause_s = FIRST_PAUSE_S
        self.due_s = self.clock() + self.pause_s
        self.say(self.part.name, f"{why}; starting again in {self.pause_s:g} s")
        self.pause_s = min(2 * self.pause_s, LONGEST_PAUSE_S)

    def _restart(self) -> None:
        self.started_s, self.due_s = self.clock(), None
        try:
            self.part.start()
        except EngineFault as fault:
            self._plan(str(fault))
        else:
            self.say(self.part.name, "started again")
