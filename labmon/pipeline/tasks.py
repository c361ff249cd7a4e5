"""Celery's doors: each calls one function. All may run twice and side by side; a broken broker only delays them."""

import logging

from celery import shared_task
from django.conf import settings
from django.db import OperationalError
from kombu.exceptions import OperationalError as BrokerFault

from ingest.store.days.check import check_days
from ingest.store.days.left import sweep_left_files
from ingest.store.days.seal import seal_days
from ingest.store.seal import seal_inbox
from labmon.ahead.backtest import score_limits
from labmon.alarms.holding import end_due_holds
from labmon.benches.keeping import forget_old_days
from labmon.drills.actions import begin_weekly_drill
from labmon.drills.follow import follow_drills
from labmon.events.steps import take_steps
from labmon.events.telling import tell_due
from labmon.experiments.consent import expire_requests
from labmon.overnight.digest import send_digests
from labmon.pipeline.derived import judge_derived
from labmon.pipeline.doubting import cast_doubts
from labmon.pipeline.nightly import make_day_statistics
from labmon.pipeline.process import process_touched
from labmon.pipeline.prune import prune_checkpoints
from labmon.pipeline.rolling import compact_closed_days, roll_up_coarse_due, roll_up_due
from labmon.pipeline.silence import judge_silence
from labmon.pipeline.watched import Watch
from labmon.runs.ledgers import ask_due_ledgers
from labmon.runs.making import make_waiting_ledgers
from labmon.runs.so_far import account_for_runs
from labmon.runs.starting import start_due_runs
from labmon.tell.sending import send_waiting

log = logging.getLogger(__name__)
HINT_EXPIRES_S = 5.0
#: A run of judging ends after this and leaves the rest to the next, so that no task is long.
PROCESS_FOR_S = 20.0
#: So long messages are handed over at a time.
TELL_FOR_S = 20.0
#: So long days are sealed at a time: after months without it (or with a new demo lab) judging keeps its share of the machine.
SEAL_DAYS_FOR_S = 20.0
#: So long day files are read again every hour.
CHECK_DAYS_FOR_S = 20.0

#: No ledger is begun after so long; one of a long fast run may take minutes.
MAKE_LEDGERS_FOR_S = 20.0
#: So long statistics of closed days are made at a time; one tap-day takes a second or two.
DAY_STATISTICS_FOR_S = 20.0


def _task(name: str, time_limit: int):  # type: ignore[no-untyped-def]
    return shared_task(
        name=f"labmon.pipeline.{name}",
        acks_late=True,
        ignore_result=True,
        time_limit=time_limit,
        autoretry_for=(OperationalError,),
        retry_backoff=1,
        max_retries=3,
    )


@_task("process", 120)
def process_task() -> None:
    """Judge what is touched; where that changed alarms, ask for telling at once."""
    if process_touched(for_s=PROCESS_FOR_S, is_paced=True).alarms:
        ask_for_telling()


@_task("silence", 60)
def silence_task() -> None:
    """Look for taps that have fallen silent; where that changed alarms, ask for telling at once."""
    if judge_silence():
        ask_for_telling()


@_task("end_holds", 60)
def end_holds_task() -> None:
    """End shelvings and times out of service that are over."""
    end_due_holds()


@_task("start_runs", 60)
def start_runs_task() -> None:
    """Start runs whose time has come."""
    start_due_runs()


@_task("cast_doubts", 120)
def cast_doubts_task() -> None:
    """Ask people about new firmware and ports that exchanged their light."""
    cast_doubts()


@_task("expire_requests", 60)
def expire_requests_task() -> None:
    """Close requests for looser limits that nobody decided in time."""
    expire_requests()


@_task("account_for_runs", 300)
def account_for_runs_task() -> None:
    """Bring runs that are under way up to date."""
    account_for_runs()


@_task("make_ledgers", 1800)
def make_ledgers_task() -> None:
    """Ask for the ledgers of runs that have ended, and make what is asked for."""
    ask_due_ledgers()
    make_waiting_ledgers(for_s=MAKE_LEDGERS_FOR_S)


@_task("watch_folder", 900)
def watch_folder_task() -> None:
    """Read in what other programs have written into the watched folder."""
    if settings.WATCHED_FOLDER is not None and settings.WATCHED_FOLDER.is_dir():
        Watch(settings.WATCHED_FOLDER).look()


@_task("roll_up", 120)
def roll_up_task() -> None:
    """Make due rollups of 10 s and 1 min anew."""
    roll_up_due(for_s=PROCESS_FOR_S)


@_task("judge_derived", 120)
def judge_derived_task() -> None:
    """Judge trusted shares and times to the limit from new one-minute cells."""
    judge_derived(for_s=PROCESS_FOR_S)


@_task("score_limits", 300)
def score_limits_task() -> None:
    """Back-test warnings ahead on the stored past, some limits at a time."""
    score_limits()


@_task("roll_up_coarse", 120)
def roll_up_coarse_task() -> None:
    """Make due hours and days anew."""
    roll_up_coarse_due()


@_task("seal", 300)
def seal_task() -> None:
    """Move readings that have waited long enough into blocks."""
    while seal_inbox() > 0:
        pass


@_task("seal_days", 600)
def seal_days_task() -> None:
    """Move days that are over into their files, some at a time; remove files that nobody needs."""
    seal_days(for_s=SEAL_DAYS_FOR_S)
    sweep_left_files()


@_task("forget_days", 1800)
def forget_days_task() -> None:
    """Delete raw readings of days past their rule; each leaves its audit row."""
    forget_old_days()


@_task("check_days", 600)
def check_days_task() -> None:
    """Read the day files that were read whole longest ago, and compare them with what was written."""
    check_days(for_s=CHECK_DAYS_FOR_S)


@_task("day_statistics", 600)
def day_statistics_task() -> None:
    """Make statistics of closed days, some at a time."""
    make_day_statistics(for_s=DAY_STATISTICS_FOR_S)


@_task("tell", 120)
def tell_task() -> None:
    """Write calls that are due, pass on what nobody took, hand over what waits in the outbox."""
    tell_due()
    take_steps()
    send_waiting(for_s=TELL_FOR_S)


@_task("morning_mails", 120)
def morning_mails_task() -> None:
    """Write the night to whoever wants it by mail."""
    send_digests()


@_task("follow_drills", 120)
def follow_drills_task() -> None:
    """Begin the weekly drill when its hour has come; send false drops, note their steps."""
    begin_weekly_drill()
    follow_drills()


@_task("compact", 1800)
def compact_task() -> None:
    """Put closed days into their buffers, thin old checkpoints."""
    while compact_closed_days():
        pass
    prune_checkpoints()


def ask_for_telling() -> None:
    """A hint: beat asks anyhow."""
    try:
        tell_task.apply_async(expires=HINT_EXPIRES_S, retry=False)
    except (BrokerFault, OSError) as fault:
        log.warning("hint_failed", extra={"fault": str(fault)})
