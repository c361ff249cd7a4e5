"""Day files with their index, marks of files nobody needs, rules for keeping raw readings, and taps that declare float32."""

import django.contrib.postgres.fields.ranges
import django.contrib.postgres.indexes
import django.db.models.deletion
from django.db import migrations, models

LEAVE_A_MARK = """
    CREATE FUNCTION ingest_mark_left_file() RETURNS trigger LANGUAGE plpgsql AS $$
    BEGIN
        INSERT INTO ingest_leftfile (name, since_us) VALUES (OLD.name, (extract(epoch FROM clock_timestamp()) * 1000000)::bigint)
            ON CONFLICT (name) DO NOTHING;
        RETURN NULL;
    END $$;
    CREATE TRIGGER mark_left_file AFTER DELETE ON ingest_dayfile FOR EACH ROW EXECUTE FUNCTION ingest_mark_left_file();
"""
LEAVE_NONE = "DROP TRIGGER mark_left_file ON ingest_dayfile; DROP FUNCTION ingest_mark_left_file();"
ID = ("id", models.BigAutoField(auto_created=True, primary_key=True, serialize=False, verbose_name="ID"))


def tap(related_name: str, **options):
    return ("tap", models.ForeignKey(on_delete=django.db.models.deletion.CASCADE, related_name=related_name, to="ingest.tap",
                                     **options))


class Migration(migrations.Migration):
    dependencies = [("ingest", "0006_broker_hash_and_link")]

    operations = [
        migrations.AddField(
            "tap", "is_float32",
            models.BooleanField(default=False, help_text="Its source declares that its values are float32.")),
        migrations.CreateModel("DayFile", [
            ID,
            ("day_us", models.BigIntegerField(help_text="Start of the day.")),
            ("name", models.CharField(help_text='Within the storage "days"; never written twice.', max_length=255, unique=True)),
            ("first_at_us", models.BigIntegerField()),
            ("last_at_us", models.BigIntegerField()),
            ("count", models.IntegerField()),
            ("size", models.BigIntegerField(help_text="Bytes of the file.")),
            ("footer_size", models.IntegerField(help_text="Bytes at its end that describe the rest.")),
            ("checks", models.BinaryField(help_text="CRC-32 of the footer, then of each column of each row group, 4 bytes each.")),
            ("sha256", models.BinaryField(max_length=32)),
            ("sealed_us", models.BigIntegerField()),
            ("verified_us", models.BigIntegerField(help_text="When the whole file was last read and found as it was written.")),
            ("fault", models.CharField(blank=True, help_text="In words, when it was last found unreadable.", max_length=300)),
            tap("day_files", db_index=False),
        ], {
            "indexes": [models.Index(fields=["tap", "last_at_us"], name="day_file_tap_time"),
                        models.Index(fields=["verified_us"], name="day_file_by_check")],
            "constraints": [models.UniqueConstraint(fields=("tap", "day_us"), name="day_file_once_per_day")],
        }),
        migrations.CreateModel("DayFileBoot", [
            ID,
            ("sequences", django.contrib.postgres.fields.ranges.BigIntegerRangeField()),
            ("day_file", models.ForeignKey(on_delete=django.db.models.deletion.CASCADE, related_name="boots", to="ingest.dayfile")),
            ("tap_boot", models.ForeignKey(db_index=False, on_delete=django.db.models.deletion.CASCADE, to="ingest.tapboot")),
        ], {
            "indexes": [models.Index(fields=["tap_boot", "day_file"], name="day_file_boot_by_boot"),
                        django.contrib.postgres.indexes.GistIndex(fields=["sequences"], name="day_file_boot_sequences")],
        }),
        migrations.CreateModel("LeftFile", [
            ID,
            ("name", models.CharField(max_length=255, unique=True)),
            ("since_us", models.BigIntegerField()),
        ]),
        migrations.CreateModel("KeepRule", [
            ID,
            ("raw_days", models.PositiveIntegerField(help_text="Whole days; empty: for ever.", null=True)),
            ("set_by", models.CharField(help_text="Who; the audit has the person.", max_length=150)),
            ("set_at", models.DateTimeField(auto_now=True)),
            ("tap", models.OneToOneField(null=True, on_delete=django.db.models.deletion.CASCADE, related_name="keep_rule",
                                         to="ingest.tap")),
        ], {
            "constraints": [
                models.UniqueConstraint(fields=("tap",), name="one_keep_rule_for_all_taps", nulls_distinct=False),
                models.CheckConstraint(condition=models.Q(("raw_days__isnull", True), ("raw_days__gt", 0), _connector="OR"),
                                       name="keep_a_day_or_more"),
            ],
        }),
        migrations.CreateModel("ForgottenDay", [
            ID,
            ("day_us", models.BigIntegerField()),
            ("count", models.BigIntegerField(help_text="Readings that were deleted.")),
            ("size", models.BigIntegerField(help_text="Bytes that were deleted.")),
            ("rule", models.CharField(help_text="The rule in words, and who set it.", max_length=200)),
            ("forgotten_us", models.BigIntegerField()),
            tap("forgotten_days", db_index=False),
        ], {
            "constraints": [models.UniqueConstraint(fields=("tap", "day_us"), name="forgotten_once_per_day")],
        }),
        migrations.RunSQL(LEAVE_A_MARK, LEAVE_NONE),
    ]
