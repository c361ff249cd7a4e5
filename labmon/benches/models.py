"""Whose bench a station stands on."""

from django.conf import settings
from django.db import models


class Bench(models.Model):
    """The people's side of a station: who owns it and what it is for."""

    station = models.OneToOneField("ingest.Station", models.CASCADE, related_name="bench")
    owner = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, blank=True, related_name="benches")
    purpose = models.CharField(max_length=300, blank=True)
