"""A delay in data time: how long a condition has held, pauses left out."""

from dataclasses import dataclass
from typing import Any


@dataclass(slots=True)
class Timer:
    """How long a condition has held without a break.

    The condition of an entry is True, False, or None (cannot tell: untrusted or undecided). Time that begins with a
    None and ends at the next known entry is not counted and does not reset, as long as known entries are at most
    ``hold_us`` apart; a longer break resets.
    """

    first_us: int | None = None
    last_us: int | None = None
    paused_from_us: int | None = None
    uncounted_us: int = 0

    def step(self, at_us: int, condition: bool | None, hold_us: int) -> int | None:
        """Time for which the condition has held, µs, where it is True at ``at_us``; else None."""
        if condition is None:
            if self.first_us is not None and self.paused_from_us is None:
                self.paused_from_us = at_us
            return None
        if not condition:
            self.reset()
            return None
        if self.first_us is None or self.last_us is None or at_us - self.last_us > hold_us:
            self.first_us, self.uncounted_us = at_us, 0
        elif self.paused_from_us is not None:
            self.uncounted_us += at_us - self.paused_from_us
        self.last_us, self.paused_from_us = at_us, None
        return at_us - self.first_us - self.uncounted_us

    def reset(self) -> None:
        self.first_us = self.last_us = self.paused_from_us = None
        self.uncounted_us = 0

    @property
    def is_running(self) -> bool:
        return self.first_us is not None

    def as_json(self) -> list[int | None]:
        return [self.first_us, self.last_us, self.paused_from_us, self.uncounted_us]

    @classmethod
    def from_json(cls, values: Any) -> "Timer":
        first_us, last_us, paused_from_us, uncounted_us = values
        return cls(first_us, last_us, paused_from_us, uncounted_us)
