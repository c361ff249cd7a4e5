"""A run's ledger in words: durations, the paragraph for the paper, the package's README."""

from collections.abc import Sequence
from typing import Any

from labmon.software import VERSION

QUANTITY_WORDS = {"er_db": ("extinction ratio", "at least", "dB"), "angle_deg": ("angle from the wanted state", "at most", "°"),
                  "dop": ("degree of polarization", "at least", ""), "power_w": ("power", "at least", "W")}


def duration_text(seconds: int) -> str:
    """Hours, minutes and seconds, with a point nowhere: ``9 h 00 min 00 s``."""
    hours, rest = divmod(int(seconds), 3600)
    minutes, seconds = divmod(rest, 60)
    if hours:
        return f"{hours} h {minutes:02d} min {seconds:02d} s"
    return f"{minutes} min {seconds:02d} s" if minutes else f"{seconds} s"


def share_text(part_s: int, whole_s: int) -> str:
    """Per cent of the run with one decimal; never 100.0 % or 0.0 % for what is neither all nor nothing."""
    share = 100.0 * part_s / whole_s
    if 0 < part_s < whole_s:
        share = min(max(share, 0.1), 99.9)
    return f"{share:.1f} %"


def limit_text(limit: dict[str, Any]) -> str:
    """``extinction ratio at least 20.0 dB``."""
    name, word, unit = QUANTITY_WORDS.get(limit["quantity"], (limit["quantity"], "at least", ""))
    digits = ".3g" if limit["quantity"] == "power_w" else ".3f" if limit["quantity"] == "dop" else ".1f"
    return f"{name} {word} {format(limit['alarm'], digits)}{unit if unit == '°' else f' {unit}' if unit else ''}"


def statement_of(run: dict[str, Any], taps: Sequence[dict[str, Any]], totals: dict[str, Any], figures: dict[str, dict[str, Any]],
                 *, package: str) -> str:
    """One paragraph for a paper; every figure in it is in data/ledger.json."""
    length_s = totals["length_s"]
    said = [f"The polarization of the light of “{run['experiment']}” (run “{run['name']}”) was watched from "
            f"{run['from'][:19]}Z to {run['until'][:19]}Z ({duration_text(length_s)}) with labmon {VERSION} at "
            f"{_and_list([tap['tap'] for tap in taps])}."]
    wants = [f"{limit_text(limit)} at {tap['tap']}{_when(limit, run)}" for tap in taps for limit in tap["limits"]]
    if wants:
        said.append(f"Wanted was an {_and_list(wants)}." if wants[0][0] in "aeiou" else f"Wanted was a {_and_list(wants)}.")
        parts = [f"{word} for {duration_text(totals[name])} ({share_text(totals[name], length_s)})" for name, word in
                 (("below_limit_s", "missed"), ("untrusted_s", "not to be told for untrusted readings"),
                  ("no_reading_s", "not to be told for want of readings")) if totals[name]]
        met = f"This was met for {duration_text(totals['good_s'])} of the time ({share_text(totals['good_s'], length_s)})"
        said.append(met + (f", {_and_list(parts)}." if parts else "."))
        if totals["longest_good_s"] and totals["longest_good_s"] < length_s:
            said.append(f"The longest unbroken good stretch lasted {duration_text(totals['longest_good_s'])}.")
        if totals["doubtful_s"]:
            said.append(f"Of the good time, {duration_text(totals['doubtful_s'])} rest on doubtful readings.")
    else:
        said.append("No limit was in force, so no second of it is called good.")
    said += [f"At {tap}, the extinction ratio of the mean leak was {one['mean_er_db']:.1f} dB; 5 % of the judged seconds lay "
             f"below {one['quantile_er_db']:.1f} dB." for tap, one in figures.items() if one.get("mean_er_db") is not None]
    said.append("Raw readings, settings, the class of every second and a program that recomputes it from the raw readings are "
                f"in the evidence package {package}.")
    return " ".join(said)


def _when(limit: dict[str, Any], run: dict[str, Any]) -> str:
    if limit["from"] <= run["from"] and limit["until"] >= run["until"]:
        return ""
    return f" from {limit['from'][:19]}Z to {limit['until'][:19]}Z"


def _and_list(parts: Sequence[str]) -> str:
    return parts[0] if len(parts) == 1 else f"{', '.join(parts[:-1])} and {parts[-1]}"
