"""One look at all benches shared by the open pages of this process, so that ten browsers cost what one does."""

import threading
import time

from labmon.benches.queries import BenchRow, bench_rows
from labmon.live.changes import changes
from labmon.people.models import Person, Role
from labmon.people.rights import role_of

KEPT_S = 1.0


class Snapshot:
    """Bench rows as everyone but guests sees them, at most ``KEPT_S`` old and never from before an urgent change."""

    def __init__(self) -> None:
        self.lock = threading.Lock()
        self.forget()

    def forget(self) -> None:
        """The next look is made anew."""
        self.rows: list[BenchRow] = []
        self.made_s = float("-inf")
        self.made_at_count = -1

    def rows_for(self, person: Person) -> list[BenchRow]:
        """The rows ``person`` may see; a guest's are always made anew."""
        if role_of(person) is Role.GUEST:
            return bench_rows(person)
        with self.lock:
            if self.made_at_count != changes.count or time.monotonic() - self.made_s > KEPT_S:
                self.made_at_count, self.made_s = changes.count, time.monotonic()
                self.rows = bench_rows(person)
            return self.rows


snapshot = Snapshot()
