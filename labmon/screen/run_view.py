"""Runs, their figures and ledgers in words. Pure, but for the addresses of pages."""

from dataclasses import dataclass
from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

from analysis.judge.ledger import Totals
from analysis.outlook.time_to_limit import Outlook, TimeBand
from labmon.runs.ledgers import LedgerInterval
from labmon.runs.models import Run, RunLedger
from labmon.runs.queries import RunState, state_of_run
from labmon.runs.watch import LimitAhead
from labmon.screen.present import NO_BREAK, age_text, number_text, time_text


def clock_text(at: datetime, zone: ZoneInfo) -> str:
    """A moment as the lab's clocks show it: ``Tue 4 Mar 20:00``."""
    local = at.astimezone(zone)
    return f"{local:%a} {local.day} {local:%b} {local:%H:%M}"


def duration_text(seconds: float) -> str:
    """To the second: ``9 h 00 min``, ``10 min 05 s``, ``12 s``."""
    whole = round(seconds)
    hours, rest = divmod(whole, 3600)
    minutes, left = divmod(rest, 60)
    if hours:
        tail = f" {left:02d}{NO_BREAK}s" if left else ""
        return f"{hours}{NO_BREAK}h {minutes:02d}{NO_BREAK}min{tail}"
    if minutes:
        return f"{minutes}{NO_BREAK}min" + (f" {left:02d}{NO_BREAK}s" if left else "")
    return f"{left}{NO_BREAK}s"


def share_text(seconds: float, of_s: float) -> str:
    """Per cent that never rounds up to 100 (or down to 0) what is not."""
    if not of_s:
        return "–"
    share = 100.0 * seconds / of_s
    shown = min(share, 99.9) if share < 100.0 else share
    shown = max(shown, 0.1) if share > 0.0 else shown
    return number_text(shown, 1, "%")


@dataclass(frozen=True, slots=True, kw_only=True)
class RunRow:
    """A run in a list."""

    id: int
    name: str
    experiment: str
    state: str
    when: str
    length: str
    owner: str
    result: str


def run_row(run: Run, now: datetime, zone: ZoneInfo, ledger: RunLedger | None) -> RunRow:
    """One line; the result is that of the newest ledger."""
    state = state_of_run(run, now)
    length_s = (run.over_at - run.starts_at).total_seconds()
    result = ""
    if state is RunState.CANCELLED:
        result = "cancelled"
    elif ledger is not None and ledger.made_at:
        result = f"{share_text(ledger.good_s, ledger.length_s)} good" + (
            f", {duration_text(ledger.below_s)} below limit" if ledger.below_s else "")
    elif state is RunState.OVER:
        result = "ledger being made"
    return RunRow(
        id=run.pk, name=run.name, experiment=run.experiment.name, state=state.value, when=clock_text(run.starts_at, zone),
        length=duration_text(length_s), owner=run.owner.username if run.owner else "nobody", result=result,
    )


def runs_sentence(running: int, planned: int) -> str:
    """The list in one sentence."""
    if not running and not planned:
        return "No run is under way or planned."
    now = "No run is under way" if not running else "One run is under way" if running == 1 else f"{running} runs are under way"
    then = "none is planned" if not planned else "one is planned" if planned == 1 else f"{planned} are planned"
    return f"{now}, {then}."


def run_sentence(run: Run, now: datetime, totals: Totals | None) -> str:
    """How the run stands."""
    state = state_of_run(run, now)
    if state is RunState.CANCELLED:
        return f"{run.name} was cancelled."
    if state is RunState.PLANNED:
        return f"{run.name} begins in {age_text((run.starts_at - now).total_seconds())}."
    if state is RunState.RUNNING:
        left = age_text((run.over_at - now).total_seconds())
        good = "" if totals is None or not totals.length_s else f": {share_text(totals.good_s, totals.length_s)} usable so far"
        return f"{run.name} has {left} to go{good}."
    if totals is None:
        return f"{run.name} is over; its ledger is being made."
    kept = "held" if has_held(run, totals) else "did not hold"
    return f"{run.name} {kept}: {duration_text(totals.good_s)} of {duration_text(totals.length_s)} good, {_bad(totals)}."


def has_held(run: Run, totals: Totals) -> bool:
    """Below the limit no longer than allowed, and trusted readings for as much of it as was wanted."""
    return totals.below_s <= run.allowed_below_s and totals.trusted_share >= run.wanted_trusted_share


def _bad(totals: Totals) -> str:
    parts = [(totals.below_s, "below limit"), (totals.no_reading_s, "no reading"), (totals.untrusted_s, "untrusted")]
    said = [f"{duration_text(seconds)} {word}" for seconds, word in parts if seconds]
    return ", ".join(said) if said else "nothing lost"


@dataclass(frozen=True, slots=True, kw_only=True)
class ClassRow:
    """A class with its time and share."""

    word: str
    time: str
    share: str
    mark: str


def class_rows(totals: Totals) -> list[ClassRow]:
    """The four classes, which sum to the run, and the doubtful part of the good one."""
    rows = [("good", totals.good_s, "good"), ("below limit", totals.below_s, "below"),
            ("untrusted", totals.untrusted_s, "untrusted"), ("no reading", totals.no_reading_s, "no-reading")]
    return [ClassRow(word=word, time=duration_text(seconds), share=share_text(seconds, totals.length_s),
                     mark=mark if seconds else "") for word, seconds, mark in rows]


def totals_of_ledger(ledger: RunLedger) -> Totals:
    """The sums that a made version keeps."""
    return Totals(ledger.length_s, ledger.good_s or 0, ledger.below_s or 0, ledger.untrusted_s or 0, ledger.no_reading_s or 0,
                  ledger.doubtful_s or 0, ledger.longest_good_s or 0, ledger.longest_good_from_s)


def ahead_words(one: LimitAhead, unit: str) -> str:
    """``er_db of n2/eom-in: half of the futures reach 20.0 dB within 2 h 10; 1 in 10 sooner than 40 min``."""
    ahead, level = one.ahead, number_text(one.ruling.version.alarm, 1, unit)
    horizon = age_text(ahead.horizon_s)
    match ahead.outlook:
        case Outlook.BEYOND:
            return f"beyond {level} now"
        case Outlook.TOO_SHORT:
            return "too few trusted readings to say"
        case Outlook.NOT_WITHIN:
            return f"not within {horizon}, as far as one can see: fewer than 1 in 10 futures reach {level}"
        case Outlook.POSSIBLE:
            return f"1 in 10 futures reach {level} sooner than {_band(ahead.tenth)}; half of them not within {horizon}"
    return f"median {_band(ahead.median)} to {level}; 1 in 10 sooner than {_band(ahead.tenth)}"


def _band(band: TimeBand) -> str:
    low, high = age_text(band.low_s), age_text(band.high_s) if band.high_s != float("inf") else "beyond the horizon"
    return f"{age_text(band.time_s)} (95 %: {low} to {high})"


@dataclass(frozen=True, slots=True, kw_only=True)
class IntervalRow:
    """A stretch of a ledger in words."""

    from_at: str
    until_at: str
    length: str
    word: str
    why: str
    mark: str


def interval_row(row: LedgerInterval) -> IntervalRow:
    """One line of the table."""
    marks = {"good": "good", "below limit": "below", "untrusted": "untrusted", "no reading": "no-reading"}
    taps = ", ".join(row.taps)
    because = "; ".join(row.reasons) + (f" ({taps})" if taps and row.reasons else taps)
    return IntervalRow(
        from_at=time_text(row.from_at), until_at=time_text(row.until_at), length=duration_text(row.length_s),
        word=row.klass.words + (" (doubtful)" if row.is_doubtful else ""), why=because, mark=marks[row.klass.words],
    )


def figure_rows(ledger: RunLedger) -> list[tuple[str, str, str, str]]:
    """Per tap: name, mean, 5 % quantile and least ER."""
    rows = []
    for tap in ledger.facts.get("taps", []):
        least = number_text(tap["least_er_db"], 1, "dB", sign="≥" if tap["least_is_bound"] else "")
        rows.append((tap["tap"], number_text(tap["mean_er_db"], 2, "dB"), number_text(tap["quantile_er_db"], 2, "dB"), least))
    return rows


def longest_text(ledger: RunLedger) -> str:
    """The longest good stretch with its times."""
    if not ledger.longest_good_s or ledger.longest_good_from_s is None:
        return "none"
    begin = ledger.from_at + timedelta(seconds=ledger.longest_good_from_s)
    end = begin + timedelta(seconds=ledger.longest_good_s)
    return f"{duration_text(ledger.longest_good_s)}, from {time_text(begin)} to {time_text(end)}"
