"""The Celery application; the beat schedule stands in labmon/pipeline/schedule.py."""

import os

from celery import Celery
from celery.signals import worker_process_init

from labmon.pipeline.schedule import BEAT_SCHEDULE

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labmon.settings")
app = Celery("labmon")
app.config_from_object("django.conf:settings", namespace="CELERY")
app.autodiscover_tasks(["labmon.pipeline", "labmon.tell", "labmon.evidence"])
app.autodiscover_tasks(["labmon.pipeline"], related_name="imports")
app.autodiscover_tasks(["labmon.pipeline"], related_name="clearing")
app.conf.beat_schedule = BEAT_SCHEDULE


@worker_process_init.connect
def keep_connection(**_: object) -> None:
    """A worker keeps its database connection from task to task, and looks whether it is alive before each."""
    from django.db import connection

    connection.settings_dict |= {"CONN_MAX_AGE": 600, "CONN_HEALTH_CHECKS": True}
