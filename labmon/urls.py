"""Addresses of pages and of the API."""

from django.urls import URLPattern, URLResolver, include, path

urlpatterns: list[URLPattern | URLResolver] = [
    path("api/v1/", include("labmon.api.urls")),
    path("health/", include("labmon.api.health_urls")),
    path("", include("labmon.screen.urls")),
]

handler403 = "labmon.screen.faults.not_allowed"
handler404 = "labmon.screen.faults.not_found"
handler500 = "labmon.screen.faults.broken"
