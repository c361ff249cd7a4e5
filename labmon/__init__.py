"""Loads the Celery application, so that shared tasks find it."""

from labmon.celery import app as celery_app

__all__ = ["celery_app"]
