"""Addresses below /health/."""

from django.urls import path

from labmon.api.call import open_to_all
from labmon.api.health import get_process, get_services

app_name = "health"
urlpatterns = [
    path("process", open_to_all(GET=get_process), name="process"),
    path("services", open_to_all(GET=get_services), name="services"),
]
