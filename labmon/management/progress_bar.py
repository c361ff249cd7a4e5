"""A bar on the error output that shows how far a long piece of work is."""

import time
from typing import TextIO

_WIDTH = 30


class ProgressBar:
    """Redrawn at most ten times a second on a terminal; one line per tenth elsewhere."""

    def __init__(self, out: TextIO, unit: str) -> None:
        self._out, self._unit = out, unit
        self._is_terminal = out.isatty()
        self._started_s = time.monotonic()
        self._drawn_s = float("-inf")
        self._tenth = -1

    def show(self, done: int, total: int | None, *, is_last: bool = False) -> None:
        """``done`` of ``total``; the last call ends the line."""
        share = min(done / total, 1.0) if total else float(is_last)
        now_s = time.monotonic()
        if self._is_terminal and (is_last or now_s - self._drawn_s > 0.1):
            self._drawn_s = now_s
            self._out.write("\r" + self._line(share, done) + ("\n" if is_last else ""))
        elif not self._is_terminal and (is_last or int(share * 10) > self._tenth):
            self._tenth = int(share * 10)
            self._out.write(self._line(share, done) + "\n")
        self._out.flush()

    def _line(self, share: float, done: int) -> str:
        elapsed_s = max(time.monotonic() - self._started_s, 1e-6)
        filled = int(share * _WIDTH)
        left = f", {elapsed_s / share - elapsed_s:.0f} s left" if 0 < share < 1 else ""
        return f"[{'=' * filled}{' ' * (_WIDTH - filled)}] {share:4.0%}  {done} {self._unit}, {done / elapsed_s:.0f}/s{left}  "
