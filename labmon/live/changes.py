"""How many changes this process's sockets have told of that must be seen at once; a plain count, no values."""


class Changes:
    """Counts up with each such change."""

    URGENT = frozenset({"alarm", "limits", "stations", "experiments", "calibration"})

    def __init__(self) -> None:
        self.count = 0

    def note(self, kind: str) -> None:
        """A change of this kind was heard."""
        if kind in self.URGENT:
            self.count += 1


changes = Changes()
