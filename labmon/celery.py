"""The Celery application; the beat schedule stands in labmon/pipeline/schedule.py."""

import os

from celery import Celery

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labmon.settings")
app = Celery("labmon")
app.config_from_object("django.conf:settings", namespace="CELERY")
app.autodiscover_tasks(["labmon.pipeline", "labmon.tell"])
app.autodiscover_tasks(["labmon.pipeline"], related_name="imports")
