"""Which tasks may never wait, and the queue of each lane. A task not named here goes the long way."""

from enum import StrEnum
from typing import Final

from django.conf import settings

#: They are short (or end by themselves after some seconds) and somebody waits for what they do.
PROMPT_TASKS: Final = ("process", "silence", "end_holds", "start_runs", "tell", "follow_drills")


class Lane(StrEnum):
    """Workers of their own for each."""

    PROMPT = "prompt"
    LONG = "long"


def queue_of(lane: Lane) -> str:
    """The lane's queue in the broker; several labs may share one."""
    return settings.CELERY_TASK_DEFAULT_QUEUE if lane is Lane.LONG else f"{settings.BROKER_PREFIX}-{lane}"


def route(name: str, *_: object, **__: object) -> dict[str, str]:
    """Celery asks for each task it sends."""
    is_prompt = name.removeprefix("labmon.pipeline.") in PROMPT_TASKS
    return {"queue": queue_of(Lane.PROMPT if is_prompt else Lane.LONG)}
