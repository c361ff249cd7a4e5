"""What ruled in a run, as the package's data/run.json has it: limits, zeros, gains, floors and leakage by time."""

from datetime import UTC, datetime
from typing import Any

from analysis.judge.ledger_tap import Ruling
from analysis.judge.rule import Quantity
from analysis.models import Calibration
from analysis.quantities import US_PER_S
from analysis.record.calibrations import FIELDS
from ingest.times import us_of
from labmon.api.named import tap_path
from labmon.api.times import parse_time, rfc3339
from labmon.evidence.rows import TapRows
from labmon.runs.models import RunLedger
from labmon.software import VERSION

FORM = "labmon evidence 1"
#: The end of a doubt that nobody has answered.
LAST_US = us_of(datetime(2199, 12, 31, tzinfo=UTC))


def run_facts(ledger: RunLedger) -> dict[str, Any]:
    """The run itself, as far as the ledger goes; nobody is named."""
    run = ledger.run
    return {"id": run.pk, "name": run.name, "experiment": run.experiment.name, "from": rfc3339(ledger.from_at),
            "until": rfc3339(ledger.until_at), "planned_until": rfc3339(run.ends_at), "planned_at": rfc3339(run.planned_at),
            "allowed_below_s": run.allowed_below_s, "wanted_trusted_share": run.wanted_trusted_share}


def software_facts(made_at: Any) -> dict[str, Any]:
    """Which program made it, and when."""
    return {"form": FORM, "software": {"name": "labmon", "version": VERSION}, "made_at": rfc3339(made_at)}


def tap_facts(rows: TapRows, limits: list[dict[str, Any]], files: dict[str, Any]) -> dict[str, Any]:
    """A tap: what it measures, what held for its readings, where they lie. ``rows`` must have been read."""
    tap = rows.tap
    last_us = rows.interval.last_us
    return {
        "tap": tap_path(tap), "kind": tap.kind, "unit": tap.unit or None, "interval_s": tap.interval_s,
        "spacings_before": {"last": None if last_us is None else rfc3339(last_us),
                            "spacings_us": list(rows.interval.spacings_us)},
        "frozen_counters": rows.flat,
        "two_devices": [[rfc3339(begin), rfc3339(end)] for begin, end in rows.knowledge.overlaps.get(tap.pk, ())],
        "doubts": [{"from": rfc3339(one.from_us), "until": rfc3339(min(one.until_us, LAST_US)), "why": one.reason.code}
                   for one in rows.knowledge.doubts.get(tap.pk, ())],
        "calibrations": [calibration_facts(one) for one in rows.knowledge.calibrations.get(tap.pk, ())],
        "limits": limits,
        "not_to_be_had": [{"from": rfc3339(hole.from_us), "until": rfc3339(hole.until_us + 1), "why": hole.why}
                          for hole in rows.holes],
        "readings": files,
    }


def calibration_facts(version: Calibration) -> dict[str, Any]:
    """A version of the calibration; it holds until the next one's valid_from. Values in the tap's raw unit (dBm taps: W)."""
    plain = {name: getattr(version, name) for name in FIELDS}
    return plain | {"valid_from": rfc3339(version.valid_from), "entered_at": rfc3339(version.entered_at),
                    "zero_taken_at": rfc3339(version.zero_taken_at)}


def limits_of(ledger: RunLedger, tap: str) -> list[dict[str, Any]]:
    """The levels that the ledger of a tap was held against, each with the half-open span in which it ruled.

    ``alarm`` is the level used; ``in_force`` what ruled, where another level was asked for.
    """
    return [{"quantity": one["quantity"], "version": one["version"], "from": _time(one["from_at"]),
             "until": _time(one["until_at"]),
             "alarm": one["used"], "in_force": one["alarm"], "warning": one["warning"], "reason": one["reason"]}
            for one in ledger.facts["limits"] if one["tap"] == tap]


def rulings_of(limits: list[dict[str, Any]]) -> list[Ruling]:
    """The levels as the fold takes them."""
    return [Ruling(Quantity(one["quantity"]), one["alarm"], us_of(parse_time(one["from"])), us_of(parse_time(one["until"])))
            for one in limits]


def declared_of(ledger: RunLedger) -> list[dict[str, Any]]:
    """What a person declared unusable."""
    return [{"from": _time(one["from_at"]), "until": _time(one["until_at"]), "reason": one["why"]}
            for one in ledger.edits.get("unusable", [])]


def totals_of(ledger: RunLedger) -> dict[str, Any]:
    """The ledger's sums as JSON has them."""
    first_s = ledger.longest_good_from_s
    return {"length_s": ledger.length_s, "good_s": ledger.good_s, "below_limit_s": ledger.below_s,
            "untrusted_s": ledger.untrusted_s, "no_reading_s": ledger.no_reading_s, "doubtful_s": ledger.doubtful_s,
            "longest_good_s": ledger.longest_good_s,
            "longest_good_from": None if first_s is None else rfc3339(us_of(ledger.from_at) + first_s * US_PER_S)}


def figures_of(ledger: RunLedger) -> dict[str, dict[str, Any]]:
    """What each tap's judged readings say, by tap."""
    names = {"mean_er_db": "mean_er_db", "quantile_er_db": "quantile_er_db", "least_er_db": "least_er_db",
             "is_bound": "least_is_bound", "samples": "samples", "judged_s": "judged_s"}
    return {one["tap"]: {name: one[kept] for name, kept in names.items()} for one in ledger.facts["taps"]}


def _time(text: str) -> str:
    return str(rfc3339(parse_time(text)))
