from labmon.celery import app
from labmon.pipeline.lanes import PROMPT_TASKS, Lane, queue_of
from labmon.pipeline.schedule import BEAT_SCHEDULE

#: What runs so often is awaited so soon.
OFTEN_S = 2.0


def queue_for(name):
    return app.amqp.router.route({}, name)["queue"].name


def test_what_runs_every_few_seconds_goes_the_prompt_way():
    often = {entry["task"] for entry in BEAT_SCHEDULE.values()
             if isinstance(entry["schedule"], float) and entry["schedule"] <= OFTEN_S}
    assert "labmon.pipeline.process" in often
    assert {queue_for(name) for name in often} == {queue_of(Lane.PROMPT)}


def test_every_prompt_task_exists():
    app.loader.import_default_modules()
    assert {f"labmon.pipeline.{name}" for name in PROMPT_TASKS} <= set(app.tasks)


def test_all_else_goes_the_long_way():
    app.loader.import_default_modules()
    others = {name for name in app.tasks if name.startswith("labmon.")} - {f"labmon.pipeline.{name}" for name in PROMPT_TASKS}
    assert {queue_for(name) for name in others} == {queue_of(Lane.LONG)}
    assert queue_of(Lane.LONG) != queue_of(Lane.PROMPT)
