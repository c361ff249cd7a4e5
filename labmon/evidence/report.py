"""The report of a run as one HTML file: words, figures and tables, no script; it prints as it is."""

from collections.abc import Sequence
from typing import Any

from django.template.loader import render_to_string
from django.utils.safestring import mark_safe

from labmon.evidence.words import duration_text, limit_text, share_text

STRETCHES_SHOWN = 60
CLASSES = (("good_s", "good"), ("below_limit_s", "below limit"), ("untrusted_s", "untrusted"), ("no_reading_s", "no reading"))


def report_of(run: dict[str, Any], taps: Sequence[dict[str, Any]], totals: dict[str, Any], figures: dict[str, dict[str, Any]],
              rows: Sequence[dict[str, Any]], drawings: Sequence[str], *, statement: str, package: str, made_at: str) -> str:
    """The whole page."""
    shown = [row for row in rows if row["class"] != "good"]
    doubtful_s = totals["doubtful_s"]
    return render_to_string("evidence/report.html", {
        "run": run, "sentence": sentence_of(run, totals), "statement": statement, "package": package,
        "made_at": made_at[:19] + "Z",
        "totals": [{"word": word, "time": duration_text(totals[name]), "share": share_text(totals[name], totals["length_s"])}
                   for name, word in CLASSES],
        "length": duration_text(totals["length_s"]), "doubtful": duration_text(doubtful_s) if doubtful_s else "",
        "longest": duration_text(totals["longest_good_s"]), "taps": [_tap(tap, figures.get(tap["tap"], {})) for tap in taps],
        "rows": [row | {"time": duration_text(row["length_s"]), "from": row["from"][:19] + "Z"}
                 for row in shown[:STRETCHES_SHOWN]],
        "more_rows": max(0, len(shown) - STRETCHES_SHOWN),
        "drawings": [mark_safe(drawing) for drawing in drawings],
    })


def sentence_of(run: dict[str, Any], totals: dict[str, Any]) -> str:
    """What the report begins with."""
    length_s, bad_s = totals["length_s"], totals["length_s"] - totals["good_s"]
    if not bad_s:
        return f"Every second of {run['name']} was good: {duration_text(length_s)}."
    return (f"{run['name']}: {duration_text(totals['good_s'])} of {duration_text(length_s)} were good "
            f"({share_text(totals['good_s'], length_s)}), {duration_text(totals['below_limit_s'])} below limit.")


def _tap(tap: dict[str, Any], figures: dict[str, Any]) -> dict[str, Any]:
    def level(name: str) -> str:
        return "–" if figures.get(name) is None else f"{figures[name]:.2f} dB"

    least = level("least_er_db")
    return {"tap": tap["tap"], "kind": tap["kind"], "unit": tap["unit"] or "–", "rows": tap["readings"]["rows"],
            "mean": level("mean_er_db"), "low": level("quantile_er_db"),
            "least": ("≥ " if figures.get("is_bound") else "") + least,
            "limits": [{"text": limit_text(one), "from": one["from"][:19] + "Z", "until": one["until"][:19] + "Z",
                        "reason": one["reason"]} for one in tap["limits"]],
            "calibrations": [one | {name: f"{one[name]:g}" for name in ("zero1", "zero2", "gain_ratio", "floor1", "floor2")}
                             | {"from": one["valid_from"][:19] + "Z", "zero": (one["zero_taken_at"] or "")[:19]}
                             for one in tap["calibrations"]]}
