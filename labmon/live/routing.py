"""Addresses of sockets."""

from django.urls import path

from labmon.live.consumers import LabConsumer

websocket_urlpatterns = [path("live/", LabConsumer.as_asgi(), name="live")]
