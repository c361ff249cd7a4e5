"""The server's disk is full: stations are told 503 with Retry-After and keep their readings; with room again all comes in.

The whole data folder (database, broker, logs) lies on a small disk in memory, which only root may make: else it is left out.
"""

import shutil
import subprocess
import tempfile
import time
from pathlib import Path

import pytest

from tests.faults.bench import await_all_sent, await_judged, make_taps, start_senders, told_of, visitor_of
from tests.faults.course import DURATION_S, EPISODES
from tests.faults.figures import note_fault
from tests.faults.history import balances, calls_of
from tests.running_lab import RunningLab, until_true

pytestmark = pytest.mark.slow

SIZE_MB = 400
FULL_AT_S, FULL_S = 8.0, 15.0
BACK_WITHIN_S = 60.0


@pytest.fixture
def small_disk():
    """A folder on a disk of its own."""
    folder = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    made = subprocess.run(["mount", "-t", "tmpfs", "-o", f"size={SIZE_MB}m", "tmpfs", folder], capture_output=True, text=True)
    if made.returncode != 0:
        folder.rmdir()
        pytest.skip(f"a disk of its own cannot be mounted here ({made.stderr.strip()}): nothing is shown of a full disk")
    folder.chmod(0o755)
    yield folder
    subprocess.run(["umount", "-l", folder], check=True)
    folder.rmdir()


class Ballast:
    """A file that takes all the room there is, again and again as room comes free."""

    def __init__(self, folder):
        self.path = folder / "ballast"

    def fill(self):
        with self.path.open("ab", buffering=0) as file:
            for size in (1 << 20, 4096, 1):
                try:
                    while True:
                        file.write(bytes(size))
                except OSError:
                    continue

    def drop(self):
        self.path.unlink()


def test_full_disk_is_told_and_left_behind(small_disk):
    with RunningLab(small_disk / "lab") as lab:
        lab.await_ready()
        visitor = visitor_of(lab)
        taps = make_taps(visitor, "full")
        ballast = Ballast(small_disk)
        senders = start_senders(lab, taps, seed=101, lost_share=0.1)
        began_s = time.monotonic()
        time.sleep(FULL_AT_S)
        before = sum(sender.tally.stored for sender in senders)
        pages = []
        while time.monotonic() < began_s + FULL_AT_S + FULL_S:
            ballast.fill()
            pages.append(lab.status("/health/process"))
            time.sleep(0.2)
        waited, free_mb = sum(sender.tally.told_503 for sender in senders), shutil.disk_usage(small_disk).free / 1e6
        ballast.drop()
        freed_s = time.monotonic()
        assert until_true(lambda: all(sender.tally.acknowledged_s and sender.tally.acknowledged_s[-1][0] > freed_s
                                      for sender in senders), BACK_WITHIN_S), said(lab)
        back_s = time.monotonic() - freed_s
        await_all_sent(senders, DURATION_S + BACK_WITHIN_S)
        judged_s = await_judged(lab)
        total = balances(visitor, taps, senders)
        for tap, sender in zip(taps, senders, strict=True):
            assert [episode[:4] for episode in told_of(visitor, tap, sender).episodes] == list(EPISODES)
        calls = calls_of(lab, taps)
        unanswered = sum(sender.tally.unanswered for sender in senders)
        note_fault("disk full on the server", f"data folder on a disk of {SIZE_MB} MB, filled for {FULL_S:.0f} s", total,
                   calls=len(calls), recovered=f"first acknowledgement {back_s:.1f} s after there was room, "
                   f"judged {judged_s:.1f} s after the last",
                   also=f"{waited} answers 503, {unanswered} attempts unanswered; "
                   f"{free_mb:.1f} MB free while full; /health/process {sorted(set(pages))}")
        assert total.is_exact and before > 0
        assert waited > 0, "nobody was told to wait: the disk was not full"
        lab.stop()


def said(lab):
    """The ends of the logs."""
    logs = sorted((lab.folder / "logs").glob("*.log"))
    return "\n".join(f"{log.name}: {log.read_text(errors='replace')[-1500:]}" for log in logs)
