"""Whose bench a station stands on."""

from django.conf import settings
from django.contrib.postgres.fields import ArrayField
from django.db import models


class Bench(models.Model):
    """The people's side of a station: who owns it and what it is for."""

    station = models.OneToOneField("ingest.Station", models.CASCADE, related_name="bench")
    owner = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, blank=True, related_name="benches")
    purpose = models.CharField(max_length=300, blank=True)
    laser = models.CharField(max_length=100, blank=True, help_text="The laser it is fed by.")
    logger = models.CharField(max_length=100, blank=True, help_text="The computer or board it is read by.")
    network = models.CharField(max_length=100, blank=True, help_text="The network its readings travel on.")
    is_drill = models.BooleanField(default=False, help_text="No bench: where marked false readings of drills come from.")


class KeyUse(models.Model):
    """When a station key was last used, and from where; written at most every half minute."""

    key = models.OneToOneField("ingest.StationKey", models.CASCADE, primary_key=True, related_name="use")
    last_used_at = models.DateTimeField()
    remote_address = models.CharField(max_length=64, blank=True)


class DoorRefusal(models.Model):
    """What the station door refused, by key and address; only the newest few hundred are kept.

    ``station`` is whose key it was, null where it was nobody's. ``hint`` is the key's first letters where it looked like one.
    """

    station = models.ForeignKey("ingest.Station", models.CASCADE, null=True, related_name="refusals")
    mark = models.BinaryField(max_length=16, unique=True, help_text="Of key, address and what was refused.")
    hint = models.CharField(max_length=8, blank=True)
    remote_address = models.CharField(max_length=64, blank=True)
    status = models.PositiveSmallIntegerField()
    title = models.CharField(max_length=200)
    detail = models.CharField(max_length=300)
    field = models.CharField(max_length=200, blank=True)
    count = models.PositiveIntegerField(default=0)
    first_at = models.DateTimeField()
    last_at = models.DateTimeField(db_index=True)


class DoorHour(models.Model):
    """Readings of a station in one hour that the door knew already, and that came behind later ones of their boot."""

    station = models.ForeignKey("ingest.Station", models.CASCADE, related_name="door_hours")
    hour_at = models.DateTimeField(db_index=True)
    known = models.BigIntegerField(default=0)
    disordered = models.BigIntegerField(default=0)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["station", "hour_at"], name="door_hour_once")]


class ClientState(models.Model):
    """What a bench's program last told of itself."""

    station = models.OneToOneField("ingest.Station", models.CASCADE, primary_key=True, related_name="client")
    told_at = models.DateTimeField()
    waiting = models.BigIntegerField(null=True)
    dropped = models.BigIntegerField(null=True)
    restarts = models.BigIntegerField(null=True)
    clock = models.CharField(max_length=200, blank=True)
    mute = ArrayField(models.CharField(max_length=63), default=list, help_text="Taps whose instrument does not answer.")
