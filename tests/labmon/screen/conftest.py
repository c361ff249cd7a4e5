"""Pages in tests name static files plainly; test_assets.py and the browser tests use the hashed ones."""

import pytest


@pytest.fixture(autouse=True)
def plain_static_names(settings):
    settings.STORAGES = settings.STORAGES | {"staticfiles": {"BACKEND": "django.contrib.staticfiles.storage.StaticFilesStorage"}}
