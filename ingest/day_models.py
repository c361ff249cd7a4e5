"""Day files and what became of past days: which file holds a day, which files nobody needs, which days are no longer kept."""

from django.contrib.postgres.fields import BigIntegerRangeField
from django.contrib.postgres.indexes import GistIndex
from django.db import models


class DayFile(models.Model):
    """A tap's readings of one UTC day in one Parquet file (docs/day-files.md); the row names the version that counts."""

    tap = models.ForeignKey("ingest.Tap", models.CASCADE, db_index=False, related_name="day_files")
    day_us = models.BigIntegerField(help_text="Start of the day.")
    name = models.CharField(max_length=255, unique=True, help_text="Within the storage \"days\"; never written twice.")
    first_at_us = models.BigIntegerField()
    last_at_us = models.BigIntegerField()
    count = models.IntegerField()
    size = models.BigIntegerField(help_text="Bytes of the file.")
    footer_size = models.IntegerField(help_text="Bytes at its end that describe the rest.")
    checks = models.BinaryField(help_text="CRC-32 of the footer, then of each column of each row group, 4 bytes each.")
    sha256 = models.BinaryField(max_length=32)
    sealed_us = models.BigIntegerField()
    verified_us = models.BigIntegerField(help_text="When the whole file was last read and found as it was written.")
    fault = models.CharField(max_length=300, blank=True, help_text="In words, when it was last found unreadable.")

    class Meta:
        constraints = [models.UniqueConstraint(fields=["tap", "day_us"], name="day_file_once_per_day")]
        indexes = [models.Index(fields=["tap", "last_at_us"], name="day_file_tap_time"),
                   models.Index(fields=["verified_us"], name="day_file_by_check")]


class DayFileBoot(models.Model):
    """Which sequences of which boot lie in a day file, as `BlockBoot` for blocks."""

    day_file = models.ForeignKey(DayFile, models.CASCADE, related_name="boots")
    tap_boot = models.ForeignKey("ingest.TapBoot", models.CASCADE, db_index=False)
    sequences = BigIntegerRangeField()

    class Meta:
        indexes = [models.Index(fields=["tap_boot", "day_file"], name="day_file_boot_by_boot"),
                   GistIndex(fields=["sequences"], name="day_file_boot_sequences")]


class LeftFile(models.Model):
    """A file in the storage "days" that no row needs: begun and not yet named by one, or replaced, or its day forgotten.

    Written down before the file is begun and (by a trigger) when its `DayFile` goes, so that whatever is killed no file is lost
    sight of; the sweep removes it when the mark is old.
    """

    name = models.CharField(max_length=255, unique=True)
    since_us = models.BigIntegerField()


class KeepRule(models.Model):
    """How long raw readings are kept at least: of one tap, or (without tap) of every tap without a rule of its own."""

    tap = models.OneToOneField("ingest.Tap", models.CASCADE, null=True, related_name="keep_rule")
    raw_days = models.PositiveIntegerField(null=True, help_text="Whole days; empty: for ever.")
    set_by = models.CharField(max_length=150, help_text="Who; the audit has the person.")
    set_at = models.DateTimeField(auto_now=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["tap"], name="one_keep_rule_for_all_taps", nulls_distinct=False),
            models.CheckConstraint(condition=models.Q(raw_days__isnull=True) | models.Q(raw_days__gt=0),
                                   name="keep_a_day_or_more"),
        ]


class ForgottenDay(models.Model):
    """A day of a tap whose raw readings are no longer kept; its rollups stay."""

    tap = models.ForeignKey("ingest.Tap", models.CASCADE, db_index=False, related_name="forgotten_days")
    day_us = models.BigIntegerField()
    count = models.BigIntegerField(help_text="Readings that were deleted.")
    size = models.BigIntegerField(help_text="Bytes that were deleted.")
    rule = models.CharField(max_length=200, help_text="The rule in words, and who set it.")
    forgotten_us = models.BigIntegerField()

    class Meta:
        constraints = [models.UniqueConstraint(fields=["tap", "day_us"], name="forgotten_once_per_day")]
