from labmon.celery import app
from labmon.pipeline.schedule import BEAT_SCHEDULE


def test_every_scheduled_task_exists_and_does_not_pile_up():
    app.loader.import_default_modules()
    for entry in BEAT_SCHEDULE.values():
        assert entry["task"] in app.tasks
        assert entry["options"]["expires"] > 0


def test_time_limits_stay_far_below_the_brokers_visibility_timeout():
    app.loader.import_default_modules()
    visible_s = app.conf.broker_transport_options["visibility_timeout"]
    assert all(task.time_limit * 2 <= visible_s for name, task in app.tasks.items() if name.startswith("labmon."))
