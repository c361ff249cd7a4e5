"""What beat sends, and how often.

``expires`` lets a task that waited longer than its own period fall away: a stopped worker finds no pile, and what a lost
one would have done the next one does.
"""

from typing import Any

from celery.schedules import crontab


def _every(name: str, seconds: float, *, expires: float | None = None) -> dict[str, Any]:
    return {"task": f"labmon.pipeline.{name}", "schedule": seconds, "options": {"expires": expires or max(2 * seconds, 3.0)}}


BEAT_SCHEDULE: dict[str, dict[str, Any]] = {
    "judge what no hint told of": _every("process", 1.0),
    "look for silence": _every("silence", 1.0),
    "end holds whose time is over": _every("end_holds", 5.0),
    "start runs whose time has come": _every("start_runs", 2.0),
    "expire requests for looser limits": _every("expire_requests", 60.0),
    "account for runs under way": _every("account_for_runs", 20.0),
    "make ledgers of runs": _every("make_ledgers", 5.0, expires=60.0),
    "make evidence of runs": {"task": "labmon.evidence.make", "schedule": 15.0, "options": {"expires": 60.0}},
    "tell": _every("tell", 2.0),
    "follow drills": _every("follow_drills", 5.0),
    "write the night by mail": _every("morning_mails", 120.0),
    "roll up": _every("roll_up", 10.0),
    "judge what rests on minutes": _every("judge_derived", 60.0),
    "back-test warnings ahead": _every("score_limits", 300.0, expires=300.0),
    "roll up hours and days": _every("roll_up_coarse", 120.0),
    "cast doubts": _every("cast_doubts", 15.0),
    "read the watched folder": _every("watch_folder", 10.0),
    "seal": _every("seal", 60.0),
    "seal days": _every("seal_days", 120.0, expires=120.0),
    "read day files again": _every("check_days", 3600.0, expires=3600.0),
    "forget days past their rule": {
        "task": "labmon.pipeline.forget_days",
        "schedule": crontab(hour="2", minute="40"),
        "options": {"expires": 6 * 3600},
    },
    "statistics of closed days": _every("day_statistics", 300.0, expires=300.0),
    "begin the night's back-test": {
        "task": "labmon.pipeline.begin_back_test",
        "schedule": crontab(hour="3", minute="30"),
        "options": {"expires": 6 * 3600},
    },
    "walk back-tests that are due": _every("walk_back_tests", 30.0, expires=30.0),
    "clear runs that start soon": _every("look_at_runs", 60.0, expires=60.0),
    "take up left imports": _every("take_up_left_imports", 300.0),
    "compact closed days": {
        "task": "labmon.pipeline.compact",
        "schedule": crontab(hour="1", minute="20"),
        "options": {"expires": 6 * 3600},
    },
}
