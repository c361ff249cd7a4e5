"""Lines on the terminal: what happens, with seconds since the start."""

import sys
import time
from typing import TextIO


class Progress:
    """Writes one line at a time, each with its age."""

    def __init__(self, out: TextIO = sys.stdout) -> None:
        self.out = out
        self.started = time.monotonic()

    def elapsed_s(self) -> float:
        """Seconds since the start."""
        return time.monotonic() - self.started

    def say(self, who: str, what: str) -> None:
        """``  1.2 s  database   PostgreSQL 18 is up``."""
        self.plain(f"{self.elapsed_s():7.1f} s  {who:<9} {what}")

    def plain(self, text: str = "") -> None:
        """A line as it is; a terminal that went away is no reason to stop."""
        try:
            print(text, file=self.out, flush=True)
        except OSError:
            self.out = open("/dev/null", "w")
