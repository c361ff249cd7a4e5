"""Stations, their taps, and the raw readings they sent."""

from django.contrib.postgres.fields import ArrayField, BigIntegerRangeField
from django.contrib.postgres.indexes import GistIndex
from django.core.validators import RegexValidator
from django.db import models

from ingest.day_models import DayFile, DayFileBoot, ForgottenDay, KeepRule, LeftFile

__all__ = ["DayFile", "DayFileBoot", "ForgottenDay", "KeepRule", "LeftFile"]  # the other half of the models
NAME_PATTERN = r"[a-z0-9][a-z0-9-]{0,62}"
is_short_name = RegexValidator(rf"\A{NAME_PATTERN}\Z", "Use small letters, digits and '-', at most 63 characters.")


class Room(models.Model):
    """A room or enclosure: what its benches share (air, lamps, climate sensor)."""

    name = models.CharField(max_length=100, unique=True)


class Station(models.Model):
    """A sender on a bench; it owns taps and proves itself by a station key."""

    name = models.CharField(max_length=63, unique=True, validators=[is_short_name])
    room = models.ForeignKey(Room, models.PROTECT, null=True, blank=True, related_name="stations")
    created_at = models.DateTimeField(auto_now_add=True)
    link_lost_at = models.DateTimeField(null=True, blank=True,
                                        help_text="When an MQTT broker last published its last will: a hint.")


class StationKey(models.Model):
    """A station's key; only its digest is kept, the key itself was shown once."""

    station = models.ForeignKey(Station, models.CASCADE, related_name="keys")
    digest = models.BinaryField(max_length=32, unique=True)
    hint = models.CharField(max_length=8)
    made_at = models.DateTimeField(auto_now_add=True)
    expires_at = models.DateTimeField(null=True, blank=True)
    revoked_at = models.DateTimeField(null=True, blank=True)
    broker_hash = models.CharField(max_length=200, blank=True, help_text="The key's hash for an MQTT broker's password file.")


class TapKind(models.TextChoices):
    TWO_PORT = "two-port"
    DARK_PORT = "dark-port"
    STOKES = "stokes"
    CLIMATE = "climate"


class Unit(models.TextChoices):
    """Unit in which a tap sends its raw powers."""

    W = "W"
    MILLIWATT = "mW"
    MICROWATT = "uW"
    DBM = "dBm"
    VOLT = "V"
    COUNT = "count"


class Tap(models.Model):
    """One place where light (or the room's air) is measured."""

    station = models.ForeignKey(Station, models.CASCADE, related_name="taps")
    name = models.CharField(max_length=63, validators=[is_short_name])
    kind = models.CharField(max_length=10, choices=TapKind)
    unit = models.CharField(max_length=5, choices=Unit, blank=True)
    interval_s = models.FloatField(null=True, blank=True, help_text="Declared time between readings, s.")
    is_float32 = models.BooleanField(default=False, help_text="Its source declares that its values are float32.")
    slot_s = models.PositiveIntegerField(default=600, help_text="Length of a sealed block, s.")
    unknown_columns = ArrayField(models.CharField(max_length=100), default=list)
    created_at = models.DateTimeField(auto_now_add=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["station", "name"], name="tap_name_once_per_station"),
            models.CheckConstraint(condition=models.Q(interval_s__isnull=True) | models.Q(interval_s__gt=0),
                                   name="tap_interval_above_zero"),
        ]


class StationBoot(models.Model):
    """One life of a station between two power-ups, and what its clock was worth.

    ``boot`` is empty for readings without boot id.
    """

    station = models.ForeignKey(Station, models.CASCADE, related_name="boots")
    boot = models.CharField(max_length=100, blank=True)
    firmware = models.CharField(max_length=200, blank=True)
    first_arrival_us = models.BigIntegerField()
    last_arrival_us = models.BigIntegerField()
    is_server_timed = models.BooleanField(default=False)
    clock_fault = models.CharField(max_length=200, blank=True, help_text="In words; empty when the clock is good.")
    clock_offset_us = models.BigIntegerField(null=True, help_text="arrival - now.at, smallest seen.")
    uptime_zero_us = models.BigIntegerField(null=True, help_text="arrival - uptime, smallest seen: when uptime was 0.")
    uptime_last_ms = models.BigIntegerField(null=True, help_text="Largest unwrapped uptime seen.")
    remote_address = models.CharField(max_length=64, blank=True)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["station", "boot"], name="station_boot_once")]


class TapBoot(models.Model):
    """Which sequence numbers of a boot are held for a tap (``held`` is an int8multirange, added by migration)."""

    tap = models.ForeignKey(Tap, models.CASCADE, related_name="boots")
    station_boot = models.ForeignKey(StationBoot, models.CASCADE, related_name="taps")
    first_at_us = models.BigIntegerField()
    last_at_us = models.BigIntegerField()
    lowest_sequence = models.BigIntegerField(null=True, help_text="Smallest sequence ever offered, also in a refused body.")

    class Meta:
        constraints = [models.UniqueConstraint(fields=["tap", "station_boot"], name="tap_boot_once")]


class TapHeard(models.Model):
    """When a tap last sent a new reading; one row a tap, written with each commit that stored some."""

    tap = models.OneToOneField(Tap, models.CASCADE, primary_key=True, related_name="heard")
    last_arrival_us = models.BigIntegerField()
    last_at_us = models.BigIntegerField()


class InboxRow(models.Model):
    """A batch's readings of one tap, as committed at the door; sealing moves them into blocks.

    The door holds the TapBoot's row when it writes, and a trigger on TapBoot takes its inbox rows along when it goes: the
    foreign keys hold without a check at every insert, which cost half of a commit (docs/decisions/0002-inbox-and-blocks.md).
    """

    tap = models.ForeignKey(Tap, models.CASCADE, db_index=False, db_constraint=False)
    tap_boot = models.ForeignKey(TapBoot, models.CASCADE, db_index=False, db_constraint=False)
    first_sequence = models.BigIntegerField(null=True)
    last_sequence = models.BigIntegerField(null=True)
    first_at_us = models.BigIntegerField()
    last_at_us = models.BigIntegerField()
    count = models.IntegerField()
    arrival_us = models.BigIntegerField()
    crc = models.BigIntegerField()
    body = models.BinaryField()

    class Meta:
        indexes = [models.Index(fields=["tap", "last_at_us"], name="inbox_tap_time")]


class Block(models.Model):
    """A tap's readings of one slot, sorted, each once, compressed."""

    tap = models.ForeignKey(Tap, models.CASCADE, db_index=False, related_name="blocks")
    slot_us = models.BigIntegerField(help_text="Start of the slot.")
    span_us = models.BigIntegerField(help_text="Length of the slot.")
    first_at_us = models.BigIntegerField()
    last_at_us = models.BigIntegerField()
    count = models.IntegerField()
    sha256 = models.BinaryField(max_length=32)
    body = models.BinaryField()

    class Meta:
        constraints = [models.UniqueConstraint(fields=["tap", "slot_us"], name="block_once_per_slot")]
        indexes = [models.Index(fields=["tap", "last_at_us"], name="block_tap_time")]


class BlockBoot(models.Model):
    """Which sequences of which boot lie in a block: finds a stored reading by its identity."""

    block = models.ForeignKey(Block, models.CASCADE, related_name="boots")
    tap_boot = models.ForeignKey(TapBoot, models.CASCADE, db_index=False)
    sequences = BigIntegerRangeField()

    class Meta:
        indexes = [models.Index(fields=["tap_boot", "block"], name="block_boot_by_boot"),
                   GistIndex(fields=["sequences"], name="block_boot_sequences")]


class Touch(models.Model):
    """A mark left by the door: new readings of this tap in this span wait to be reduced and judged."""

    tap = models.ForeignKey(Tap, models.CASCADE, db_constraint=False)
    first_at_us = models.BigIntegerField()
    last_at_us = models.BigIntegerField()
    arrival_us = models.BigIntegerField()


class SetAside(models.Model):
    """A reading that could not be used: kept as it came, never mixed in."""

    station = models.ForeignKey(Station, models.CASCADE, related_name="set_aside")
    tap = models.ForeignKey(Tap, models.CASCADE, null=True, related_name="set_aside")
    boot = models.CharField(max_length=100, blank=True)
    sequence = models.BigIntegerField(null=True)
    arrival_us = models.BigIntegerField()
    field = models.CharField(max_length=100)
    why = models.CharField(max_length=300)
    do = models.CharField(max_length=300)
    reading = models.JSONField(help_text="The reading as it came; non-finite numbers as text.")
    digest = models.BinaryField(max_length=16, help_text="Of identity and content: the same reading set aside once.")

    class Meta:
        indexes = [models.Index(fields=["station", "-id"], name="aside_newest")]
        constraints = [models.UniqueConstraint(fields=["station", "digest"], name="set_aside_once")]


class DoorUp(models.Model):
    """A span in which a process of the station door was up: silence is judged only inside such spans."""

    process = models.UUIDField(unique=True)
    from_us = models.BigIntegerField()
    until_us = models.BigIntegerField(db_index=True)


class ColumnMapping(models.Model):
    """How a station's files are read: saved with the station, no presets."""

    tap = models.OneToOneField(Tap, models.CASCADE, related_name="mapping")
    rules = models.JSONField()
    saved_at = models.DateTimeField(auto_now=True)


class FileImport(models.Model):
    """A file that was read in, with progress and what became of its rows."""

    tap = models.ForeignKey(Tap, models.CASCADE, related_name="imports")
    file_name = models.CharField(max_length=255)
    sha256 = models.CharField(max_length=64)
    rules = models.JSONField(null=True, help_text="The mapping it is read in with; empty until someone asks for it.")
    started_at = models.DateTimeField(auto_now_add=True)
    finished_at = models.DateTimeField(null=True)
    rows_total = models.IntegerField(null=True)
    rows_done = models.IntegerField(default=0)
    stored = models.IntegerField(default=0)
    known = models.IntegerField(default=0)
    set_aside = models.IntegerField(default=0)
    error = models.CharField(max_length=500, blank=True)


class WatchedFile(models.Model):
    """A file of the watched folder: how far it has been read, and what is wrong with it.

    ``edges`` is a digest of its first and of its last read bytes: where it stands, what was read still stands, and only what
    has been added is read. ``problem`` is empty where all is well.
    """

    tap = models.ForeignKey(Tap, models.CASCADE, related_name="watched_files")
    name = models.CharField(max_length=255)
    record = models.ForeignKey(FileImport, models.SET_NULL, null=True, related_name="+")
    looked_size = models.BigIntegerField(default=0, help_text="Its bytes at the last look.")
    changed_ns = models.BigIntegerField(default=0, help_text="When it had been changed last, at the last look.")
    is_whole = models.BooleanField(default=False, help_text="It had been at rest: its last line counts without an end.")
    mapping_mark = models.CharField(max_length=64, blank=True, help_text="Which state of the mapping it was looked at with.")
    read_size = models.BigIntegerField(default=0, help_text="Bytes that have been read in.")
    edges = models.CharField(max_length=64, blank=True)
    lines = models.BigIntegerField(default=0, help_text="Line ends within them.")
    is_in_order = models.BooleanField(default=True, help_text="No line was earlier than the one before it.")
    last_at_us = models.BigIntegerField(null=True)
    problem = models.CharField(max_length=500, blank=True)
    changed_at = models.DateTimeField(auto_now=True, help_text="When this row changed.")

    class Meta:
        constraints = [models.UniqueConstraint(fields=["tap", "name"], name="watched_file_once")]
