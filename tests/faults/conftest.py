"""One running lab for all kill tests, and one run in it that nothing disturbs."""

import shutil
import tempfile
from pathlib import Path

import pytest

from tests.faults.bench import LONGEST_RUN_S, Told, await_all_sent, await_judged, make_taps, start_senders, told_of, visitor_of
from tests.faults.figures import table_lines
from tests.running_lab import RunningLab, processes_of, until_true


def pytest_terminal_summary(terminalreporter):
    """The fault table, of whatever faults ran."""
    for line in table_lines():
        terminalreporter.write_line(line)


@pytest.fixture(scope="session")
def lab():
    """A lab on durable engines, as ``run_lab`` starts it."""
    parent = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    with RunningLab(parent / "lab") as running:
        running.await_ready()
        yield running
        running.stop()
    assert until_true(lambda: processes_of(parent / "lab") == [], 10.0), processes_of(parent / "lab")
    shutil.rmtree(parent)


@pytest.fixture(scope="session")
def visitor(lab):
    """A manager of that lab."""
    return visitor_of(lab)


@pytest.fixture(scope="session")
def undisturbed(lab, visitor) -> list[Told]:
    """What a run tells in which nobody kills anything, no answer is lost and all comes in order."""
    taps = make_taps(visitor, "calm")
    senders = start_senders(lab, taps, seed=1)
    await_all_sent(senders, LONGEST_RUN_S)
    await_judged(lab)
    return [told_of(visitor, tap, sender) for tap, sender in zip(taps, senders, strict=True)]
