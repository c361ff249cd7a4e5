"""Recompute the ledger of a run from its raw readings, with numpy and pandas alone, and compare it with the one given.

Unpack the package, then:  python recompute.py            (in its folder; or give the folder as argument)

It reads data/run.json (what ruled: limits, zeros, gains, floors, leakage by time) and data/readings/*.csv (every reading as it
was sent), works out extinction ratio, angle, trust and the class of every second anew, and compares with data/ledger.csv and
data/ledger.json. It ends with 0 where all agree, with 1 where something differs, naming it. The rules are written down in
README.txt. It was written apart from labmon's own code and shares nothing with it.
"""

import hashlib
import json
import math
import sys
from pathlib import Path
from statistics import NormalDist, median

import numpy as np
import pandas as pd

GOOD, UNTRUSTED, NO_READING, BELOW = 0, 1, 2, 3          # of several taps or limits the highest stands
WORDS = ("good", "untrusted", "no reading", "below limit")
NONE, BAD, DOUBT, SURE = 0, 1, 2, 3                      # trust of one reading
SECOND = 1_000_000
MISSING = np.iinfo(np.int64).min
WATTS = {"W": 1.0, "mW": 1e-3, "uW": 1e-6, "dBm": 1.0, "V": math.nan, "count": math.nan}
LARGEST_DIFFERENCE_DB = 1e-6
LISTED = 20


# ---------------------------------------------------------------- the package

def broken_files(folder):
    """Files whose SHA-256 is not that of the manifests, that are missing, or that no manifest names."""
    faults, named = [], set()
    for manifest in ("manifest-sha256.txt", "tagmanifest-sha256.txt"):
        if not (folder / manifest).is_file():
            faults.append(f"{manifest} is missing")
            continue
        for line in (folder / manifest).read_text(encoding="utf-8").splitlines():
            digest, _, name = line.partition("  ")
            named.add(name)
            path = folder / name
            if not path.is_file():
                faults.append(f"{name} is missing")
            elif sha256_of(path) != digest:
                faults.append(f"{name} was changed: its SHA-256 is not that of {manifest}")
    if (folder / "data").is_dir():
        there = {path.relative_to(folder).as_posix() for path in (folder / "data").rglob("*") if path.is_file()}
        faults += [f"{name} was added: no manifest names it" for name in sorted(there - named)]
    return faults


def sha256_of(path):
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while part := file.read(1 << 20):
            digest.update(part)
    return digest.hexdigest()


# ---------------------------------------------------------------- readings

def micros(text):
    """RFC 3339 to microseconds since 1970."""
    return int(np.datetime64(text.removesuffix("Z"), "us").astype(np.int64))


def micros_of(column):
    """RFC 3339 texts to microseconds since 1970; the smallest integer where there is none."""
    texts = column.to_numpy(dtype=object)
    given = np.array([text != "" for text in texts], dtype=bool)
    found = np.full(len(texts), MISSING, np.int64)
    if given.any():
        bare = np.array([text[:-1] for text in texts[given]], dtype="datetime64[us]")
        found[given] = bare.astype(np.int64)
    return found


def numbers_of(column):
    """Texts as exactly the numbers that they name; NaN where there is none."""
    return np.array([float(text) if text else math.nan for text in column.tolist()])


def read_rows(path, unit):
    """The readings of a tap: numbers by column name without unit, times in microseconds."""
    plain = {"at", "own_at", "arrival_at", "is_server_timed", "er_db"}
    table = pd.read_csv(path, usecols=lambda name: name in plain or name[:4] == "raw_", dtype="str", keep_default_na=False)
    rows = {name: micros_of(table[name]) for name in ("at", "own_at", "arrival_at")}
    rows["is_server_timed"] = table["is_server_timed"].to_numpy(dtype=object) == "true"
    for name in table.columns:
        if name.startswith("raw_"):
            plain = name.removeprefix("raw_")
            plain = plain.removesuffix(f"_{unit}") if unit and plain not in ("azimuth_deg", "ellipticity_deg") else plain
            if plain != "unknown":
                rows[plain] = numbers_of(table[name])
        elif name == "er_db":
            rows["given_er_db"] = numbers_of(table[name])
    return rows


def column(rows, name):
    """A column, all NaN where it was not sent."""
    return rows[name] if name in rows else np.full(len(rows["at"]), np.nan)


def linear(raw, unit):
    """On a linear scale: W for dBm."""
    return 1e-3 * 10.0 ** (raw / 10.0) if unit == "dBm" else raw


class Settings:
    """The calibration that held for each reading: ``get(name)`` is one number a reading, NaN where not set."""

    def __init__(self, versions, at):
        starts = np.array([micros(version["valid_from"]) for version in versions], dtype=np.int64)
        self.index = np.searchsorted(starts, at, side="right")      # 0: before the first version
        self.versions = [{}, *versions]

    def get(self, name, default=math.nan):
        values = [default if version.get(name) is None else version[name] for version in self.versions]
        return np.array(values, dtype=np.float64)[self.index]

    def texts(self, name, default):
        return np.array([version.get(name) or default for version in self.versions], dtype=object)[self.index]

    def rows_of(self, name, default):
        """Matrices or vectors by reading."""
        given = [default if version.get(name) is None else version[name] for version in self.versions]
        return np.array(given, dtype=np.float64)[self.index]


# ---------------------------------------------------------------- extinction ratio and trust

def upper_limit(net, sigma):
    """One-sided 95 % limit of a power that cannot be negative: x + s PhiInv(1 - 0.05 Phi(x/s))."""
    normal = NormalDist()
    return np.array([x - s * normal.inv_cdf(0.05 * 0.5 * math.erfc(-x / s / math.sqrt(2.0)))
                     for x, s in zip(net, sigma, strict=True)])


def ratio_of(wanted, other, wanted_sigma, other_sigma):
    """ER, dB; where it is at least, and at most, so much; where it is dark; where it is negative; where it is no number."""
    finite = np.isfinite(wanted) & np.isfinite(other)
    with np.errstate(invalid="ignore"):
        dark = (np.abs(wanted) <= 3.0 * wanted_sigma) & (np.abs(other) <= 3.0 * other_sigma)
        sees_wanted = finite & (wanted > 0) & (wanted >= 1.6448536269514722 * wanted_sigma)
        sees_other = finite & (other > 0) & (other >= 1.6448536269514722 * other_sigma)
        at_least = sees_wanted & ~sees_other & (other_sigma > 0) & (other >= -5.0 * other_sigma) & ~dark
        at_most = sees_other & ~sees_wanted & (wanted_sigma > 0) & (wanted >= -5.0 * wanted_sigma) & ~dark
    value = sees_wanted & sees_other & ~dark
    top, bottom = np.array(wanted, dtype=float), np.array(other, dtype=float)
    bottom[at_least] = upper_limit(other[at_least], other_sigma[at_least])
    top[at_most] = upper_limit(wanted[at_most], wanted_sigma[at_most])
    has = value | at_least | at_most
    er_db = np.full(len(top), np.nan)
    er_db[has] = 10.0 * np.log10(top[has] / bottom[has])
    return er_db, at_least, at_most, dark, ~has & ~dark & finite, ~finite


def degrees_of(er_db):
    """Angle on the sphere of fully polarized light with this extinction ratio, degrees."""
    with np.errstate(over="ignore"):
        return np.degrees(2.0 * np.arctan(10.0 ** (-er_db / 20.0)))


def reading_sigma(rows, port, unit, raw, floor):
    spread, averaged = column(rows, f"{port}_sd"), column(rows, "averaged")
    if unit == "dBm":
        spread = spread * np.abs(raw) * math.log(10.0) / 10.0
    with np.errstate(invalid="ignore"):
        error = spread / np.sqrt(np.where(averaged > 1.0, averaged, np.where(np.isnan(averaged), np.nan, 1.0)))
    return np.hypot(floor, np.where(np.isfinite(error), error, 0.0))


def trust_by(count, *, none=False, bad=False, doubt=False):
    trust = np.full(count, SURE)
    trust[np.broadcast_to(doubt, count)] = DOUBT
    trust[np.broadcast_to(bad, count)] = BAD
    trust[np.broadcast_to(none, count)] = NONE
    return trust


def judge_readings(tap, rows):
    """Per quantity: value, trust, where the value is at least so good, where it is at most so good."""
    settings = Settings(tap["calibrations"], rows["at"])
    flat = frozen(tap, rows)
    late = rows["own_at"] != MISSING
    wrong = rows["is_server_timed"] & late & (np.abs(np.where(late, rows["own_at"], rows["at"]) - rows["at"]) > 60 * SECOND)
    future = late & ~wrong & (np.where(late, rows["own_at"], 0) - rows["arrival_at"] > 2 * SECOND)
    taken = [version.get("zero_taken_at") for version in settings.versions]
    old_from = np.array([micros(one) + 30 * 86_400 * SECOND if one else np.iinfo(np.int64).max for one in taken])
    doubt = wrong | future | (rows["at"] > old_from[settings.index])
    taken = np.array([micros(one) if one else MISSING for one in taken])[settings.index]
    for span in tap["doubts"]:
        inside = (rows["at"] >= micros(span["from"])) & (rows["at"] < micros(span["until"]))
        doubt |= inside & ((taken < micros(span["from"])) | (span["why"] != "new_firmware"))
    double = np.zeros(len(rows["at"]), dtype=bool)
    for begin, end in tap["two_devices"]:
        double |= (rows["at"] >= micros(begin)) & (rows["at"] <= micros(end))
    judge = {"two-port": judge_ports, "dark-port": judge_ports, "stokes": judge_stokes}[tap["kind"]]
    return judge(tap, rows, settings, flat, doubt, double)


def judge_ports(tap, rows, settings, flat, doubt, double):
    unit, count = tap["unit"], len(rows["at"])
    raw2 = linear(column(rows, "port2"), unit)
    gain = settings.get("gain_ratio", 1.0)
    dark = (raw2 - settings.get("zero2", 0.0)) * gain
    dark_sigma = reading_sigma(rows, "port2", unit, raw2, settings.get("floor2", 0.0)) * gain
    leakage = settings.rows_of("leakage", [[1.0, 0.0], [0.0, 1.0]])
    unsure = settings.rows_of("leakage_sigma", [[0.0, 0.0], [0.0, 0.0]])
    a, b, c, d = leakage[:, 0, 0], leakage[:, 0, 1], leakage[:, 1, 0], leakage[:, 1, 1]
    has_leakage = any(version.get("leakage") is not None for version in settings.versions)
    declared, no_bright = np.zeros(count, bool), np.zeros(count, bool)
    if tap["kind"] == "two-port":
        raw1 = linear(column(rows, "port1"), unit)
        first = raw1 - settings.get("zero1", 0.0)
        first_sigma = reading_sigma(rows, "port1", unit, raw1, settings.get("floor1", 0.0))
        second, second_sigma = dark, dark_sigma
        if has_leakage:
            scale = 1.0 / (a * d - b * c)
            first, second = scale * (d * first - b * second), scale * (a * second - c * first)
            first_sigma = np.sqrt(first_sigma**2 + (unsure[:, 0, 0] * first) ** 2 + (unsure[:, 0, 1] * second) ** 2)
            second_sigma = np.sqrt(second_sigma**2 + (unsure[:, 1, 0] * first) ** 2 + (unsure[:, 1, 1] * second) ** 2)
            first_sigma, second_sigma = (np.abs(scale) * np.sqrt(d**2 * first_sigma**2 + b**2 * second_sigma**2),
                                         np.abs(scale) * np.sqrt(c**2 * first_sigma**2 + a**2 * second_sigma**2))
        lost = ~np.isfinite(first) | ~np.isfinite(second)
    else:
        raw1 = linear(column(rows, "monitor"), unit)
        monitor_ratio = settings.get("monitor_ratio")
        first = (raw1 - settings.get("zero1", 0.0)) * monitor_ratio
        declared = np.isnan(first)
        first = np.where(declared, settings.get("bright_nominal"), first)
        first_sigma = np.where(declared, 0.0, np.abs(settings.get("floor1", 0.0) * np.nan_to_num(monitor_ratio)))
        second, second_sigma = dark, dark_sigma
        if has_leakage:
            second = (dark - c * first) / d
            second_sigma = np.sqrt(dark_sigma**2 + (c * first_sigma) ** 2 + (unsure[:, 1, 0] * first) ** 2
                                   + (unsure[:, 1, 1] * second) ** 2) / np.abs(d)
        no_bright = np.isnan(first)
        declared &= ~no_bright
        lost = ~np.isfinite(second)
    with np.errstate(invalid="ignore"):
        full = (np.nan_to_num(column(rows, "clipped")) > 0) | (raw1 >= settings.get("saturation1")) | (
            raw2 >= settings.get("saturation2"))
    second_wanted = settings.get("wanted_port", 1.0) == 2.0
    wanted, other = np.where(second_wanted, second, first), np.where(second_wanted, first, second)
    wanted_sigma = np.where(second_wanted, second_sigma, first_sigma)
    other_sigma = np.where(second_wanted, first_sigma, second_sigma)
    er_db, at_least, at_most, is_dark, negative, undefined = ratio_of(wanted, other, wanted_sigma, other_sigma)
    undefined &= ~no_bright
    frozen_any = flat.any(axis=1)
    with np.errstate(invalid="ignore"):
        bright_is_second = (wanted > other) == second_wanted
    frozen_bright = np.where(bright_is_second, flat[:, 1], flat[:, 0])
    er_trust = trust_by(count, none=no_bright, bad=full | lost | is_dark | negative | undefined | frozen_any | double,
                        doubt=doubt | declared)
    power_trust = trust_by(count, none=no_bright | math.isnan(WATTS[unit]), bad=full | lost | frozen_bright | double,
                           doubt=doubt | declared)
    never = np.zeros(count, bool)
    return {"er_db": (er_db, er_trust, at_least, at_most), "angle_deg": (degrees_of(er_db), er_trust, at_least, at_most),
            "power_w": ((wanted + other) * WATTS[unit], power_trust, never, never),
            "dop": (np.full(count, np.nan), np.full(count, NONE), never, never)}


def judge_stokes(tap, rows, settings, flat, doubt, double):
    unit, count = tap["unit"], len(rows["at"])
    sent = np.isfinite(column(rows, "s0")) if "s0" in rows else np.zeros(count, bool)
    if "s0" in rows and not np.isfinite(column(rows, "azimuth_deg")).any():
        sent[:] = True                                    # a tap that never sent angles
    total = np.where(sent, column(rows, "s0"), linear(column(rows, "power"), unit))
    chi, psi = np.radians(column(rows, "ellipticity_deg")), np.radians(column(rows, "azimuth_deg"))
    psi = np.where((np.abs(chi) >= np.pi / 4 - 1e-12) & np.isnan(psi), 0.0, psi)
    equator = np.cos(2 * chi)
    by_angle = (equator * np.cos(2 * psi), equator * np.sin(2 * psi), np.sin(2 * chi))
    s1, s2, s3 = (np.where(sent, column(rows, name), angle) for name, angle in zip(("s1", "s2", "s3"), by_angle, strict=True))
    s3 = np.where(settings.texts("handedness", "optics") == "ieee", -s3, s3)
    length = np.sqrt(s1 * s1 + s2 * s2 + s3 * s3)
    with np.errstate(invalid="ignore", divide="ignore"):
        dop = np.where(sent, length / np.where(total > 0, total, np.nan), column(rows, "dop"))
        unit_length = np.where(length == 0, np.nan, length)
        sop = np.stack([s1 / unit_length, s2 / unit_length, s3 / unit_length], axis=1)
        full = (np.nan_to_num(column(rows, "clipped")) > 0) | (sent & (total >= settings.get("saturation1")))
        odd = dop > 1.0 + 1e-6
    lost = ~(np.isfinite(s1) & np.isfinite(s2) & np.isfinite(s3))
    frozen_any = flat.any(axis=1)
    no_dop = np.isnan(dop) & ~lost
    state = settings.rows_of("wanted_state", [math.nan] * 3)
    size = np.linalg.norm(state, axis=1)
    unset = ~(size > 0)
    with np.errstate(invalid="ignore"):
        axis = state / np.where(size > 0, size, np.nan)[:, None]
    cosine = axis[:, 0] * sop[:, 0] + axis[:, 1] * sop[:, 1] + axis[:, 2] * sop[:, 2]
    scale, share = np.where(np.isfinite(total), total, 1.0), np.where(dop == 0, 0.0, dop * cosine)
    wanted, other = 0.5 * scale * (1 + share), 0.5 * scale * (1 - share)
    er_db, at_least, at_most, is_dark, negative, undefined = ratio_of(wanted, other, settings.get("floor1", 0.0),
                                                                      settings.get("floor2", 0.0))
    near, far = np.sqrt(((axis - sop) ** 2).sum(axis=1)), np.sqrt(((axis + sop) ** 2).sum(axis=1))
    angle_deg = np.degrees(2.0 * np.arctan2(near, far))
    bad = full | lost | frozen_any | double
    never = np.zeros(count, bool)
    er_trust = trust_by(count, none=unset | (no_dop & ~sent), doubt=doubt | odd,
                        bad=bad | (no_dop & sent) | ((is_dark | negative | undefined) & ~unset))
    angle_trust = trust_by(count, none=unset, bad=bad | np.isnan(angle_deg), doubt=doubt | odd)
    dop_trust = trust_by(count, none=no_dop & ~sent, bad=bad | (no_dop & sent), doubt=doubt | odd)
    power_trust = trust_by(count, none=math.isnan(WATTS[unit or "V"]), bad=bad | (~np.isfinite(total) & ~lost), doubt=doubt)
    return {"er_db": (er_db, er_trust, at_least, at_most), "angle_deg": (angle_deg, angle_trust, never, never),
            "dop": (dop, dop_trust, never, never), "power_w": (total * WATTS[unit or "V"], power_trust, never, never)}


def frozen(tap, rows):
    """Where each raw channel stands still although it should flicker, shape (N, channels): walked reading by reading."""
    if tap["kind"] == "stokes":
        names = ("s1", "s2", "s3") if "s0" in rows and np.isfinite(rows["s0"]).any() else ("azimuth_deg", "ellipticity_deg")
        mixed = sum(weight * column(rows, name) for weight, name in zip((1.0, 2.0**0.5, 3.0**0.5), names, strict=False))
        channels = [mixed]
    else:
        channels = [column(rows, "port1" if tap["kind"] == "two-port" else "monitor"), column(rows, "port2")]
    before = tap["frozen_counters"] or [[None, 0, None, 0, 0, 0]] * len(channels)
    walks = [Walk(*counters) for counters in before]
    flat = np.zeros((len(rows["at"]), len(channels)), dtype=bool)
    for number, values in enumerate(zip(*(channel.tolist() for channel in channels), strict=True)):
        for walk, value in zip(walks, values, strict=True):
            walk.take(value)
        for place, walk in enumerate(walks):
            others = [one for one in walks if one is not walk]
            stands = walk.run >= 30 and walk.moves >= 10 and 2 * walk.large > walk.pairs
            if others and walk.moves == 0 and walk.run >= 300:
                moved, highest = max(one.moves for one in others), max(one.value for one in others)
                stands = stands or (10 * moved >= walk.run and walk.value < highest)
            flat[number, place] = stands
    return flat


class Walk:
    """What is known of a channel up to a reading: its value, equal readings in a row, smallest change, changes."""

    def __init__(self, value, run, step, pairs, moves, large):
        self.value = math.nan if value is None else value
        self.run, self.step, self.pairs, self.moves, self.large = run, math.inf if step is None else step, pairs, moves, large

    def take(self, value):
        if self.value != self.value:                      # nothing before, or no number: neither repeat nor move
            self.run = 1
        elif value == self.value:
            self.run += 1
        else:
            change = abs(value - self.value)
            if change > 0:
                self.step = min(self.step, change)
            self.pairs += min(self.run, 30)
            self.moves += 1
            self.large += change > 1.5 * self.step
            self.run = 1
        self.value = value


# ---------------------------------------------------------------- seconds

def reach_of(tap, at):
    """Up to when each reading holds: to the next, if that comes within three intervals, else for one interval."""
    if tap["interval_s"]:
        nominal = [tap["interval_s"]] * len(at)
    else:
        last, spacings = tap["spacings_before"]["last"], list(tap["spacings_before"]["spacings_us"])
        last = None if last is None else micros(last)
        nominal, middle_us = [], None
        for moment in at.tolist():
            if last is not None and moment > last:
                spacings = [*spacings, moment - last][-15:]
                middle_us = None
            last = moment if last is None else max(last, moment)
            middle_us = median(spacings) if middle_us is None and spacings else middle_us
            nominal.append(middle_us / SECOND if spacings else 1.0)
    nominal = np.round(np.array(nominal) * SECOND).astype(np.int64)
    after = np.append(at[1:], np.iinfo(np.int64).max)[:len(at)]
    return np.where(after - at <= 3 * nominal, after, at + nominal)


def seconds_of_tap(tap, at, quantities, begin, end):
    """Class and doubt of each second of the run for one tap."""
    length = (end - begin) // SECOND
    until = reach_of(tap, at)
    klass, doubt = np.full(length, NO_READING), np.zeros(length, bool)
    first = np.searchsorted(at, begin + SECOND * np.arange(length + 1))
    rulings = [(one["quantity"], one["alarm"], micros(one["from"]), micros(one["until"])) for one in tap["limits"]]
    for second in range(length):
        low, high = int(first[second]), int(first[second + 1])
        if low == high:                                   # no reading of its own: the one before, if it holds to its end
            if low == 0 or until[low - 1] < begin + SECOND * (second + 1):
                continue
            low = low - 1
        klass[second], doubt[second] = judge_second(quantities, rulings, begin + SECOND * second, low, high)
    return klass, doubt


def judge_second(quantities, rulings, moment, low, high):
    """A second that readings ``low`` up to ``high`` cover, against every limit in force."""
    found, any_doubt = [], False
    for quantity, alarm, begin, end in rulings:
        if not begin <= moment < end:
            continue
        value, trust, at_least, at_most = (part[low:high] for part in quantities[quantity])
        usable = (trust >= DOUBT) & np.isfinite(value)
        if not usable.any():
            found.append(UNTRUSTED)
            continue
        value, is_open, is_capped = value[usable], at_least[usable], at_most[usable]
        beyond = value > alarm if quantity == "angle_deg" else value < alarm
        if (beyond & ~is_open).any():
            found.append(BELOW)
            continue
        surely_inside = (~beyond & ~is_capped).any()
        any_doubt = any_doubt or not surely_inside or not (trust[usable] == SURE).any()
        found.append(GOOD)
    if not found:
        return UNTRUSTED, False                           # nothing to hold it against
    worst = max(found)
    return worst, any_doubt and worst == GOOD


def ledger_of(folder, run):
    """Class and doubt of each second of the run, over all taps and what a person declared."""
    begin, end = micros(run["run"]["from"]), micros(run["run"]["until"])
    klass, doubt = None, np.zeros((end - begin) // SECOND, bool)
    differences = []
    for tap in run["taps"]:
        rows = read_rows(folder / tap["readings"]["csv"], tap["unit"] or "")
        if len(rows["at"]) != tap["readings"]["rows"]:
            differences.append(f"{tap['readings']['csv']} has {len(rows['at'])} rows; data/run.json says "
                               f"{tap['readings']['rows']}")
        if (np.diff(rows["at"]) < 0).any():
            differences.append(f"{tap['readings']['csv']} is not in order of time")
        quantities = judge_readings(tap, rows)
        differences += unlike_rows(tap, rows, quantities)
        own, own_doubt = seconds_of_tap(tap, rows["at"], quantities, begin, end)
        klass = own if klass is None else np.maximum(klass, own)
        doubt |= own_doubt
    klass = np.full(len(doubt), NO_READING) if klass is None else klass
    for span in run["declared_unusable"]:
        first, last = (micros(span["from"]) - begin) // SECOND, -((begin - micros(span["until"])) // SECOND)
        part = slice(max(first, 0), max(last, 0))
        klass[part] = np.where(klass[part] == GOOD, UNTRUSTED, klass[part])
    return klass, doubt & (klass == GOOD), differences


def unlike_rows(tap, rows, quantities):
    """Rows whose given extinction ratio is not that of their raw values."""
    given, made = column(rows, "given_er_db"), quantities["er_db"][0]
    unlike = np.flatnonzero((np.isnan(given) != np.isnan(made)) | (np.abs(given - made) > LARGEST_DIFFERENCE_DB))
    name = tap["readings"]["csv"]
    said = [f"{name} row {row + 2} ({moment_text(rows['at'][row])}): er_db is given as {given[row]:.6f}, its raw values make "
            f"{made[row]:.6f}" for row in unlike[:LISTED].tolist()]
    return said + ([f"{name}: {len(unlike) - LISTED} more rows"] if len(unlike) > LISTED else [])


# ---------------------------------------------------------------- comparison

def moment_text(moment):
    return str(np.datetime64(int(moment), "us")) + "Z"


def given_seconds(folder, begin, length):
    """Class and doubt of each second as data/ledger.csv has them; -1 where it has none, and what is wrong with it."""
    table = pd.read_csv(folder / "data/ledger.csv", dtype=str, keep_default_na=False)
    klass, doubt, faults = np.full(length, -1), np.zeros(length, bool), []
    for number, row in enumerate(table.to_dict("records"), start=2):
        first, last = ((micros(row[name]) - begin) // SECOND for name in ("from", "until"))
        if row["class"] not in WORDS or not 0 <= first < last <= length or int(row["length_s"]) != last - first:
            faults.append(f"data/ledger.csv row {number} cannot be: {row}")
            continue
        if (klass[first:last] >= 0).any():
            faults.append(f"data/ledger.csv row {number} overlaps an earlier one")
        klass[first:last], doubt[first:last] = WORDS.index(row["class"]), row["is_doubtful"] == "true"
    if (klass < 0).any():
        first = moment_text(begin + SECOND * int(np.argmax(klass < 0)))
        faults.append(f"data/ledger.csv says nothing of {int((klass < 0).sum())} s, the first {first}")
    return klass, doubt, faults


def differing_seconds(begin, given, made, what):
    """Stretches in which two ledgers differ, in words."""
    unlike = given != made
    edges = np.flatnonzero(np.diff(np.concatenate([[0], unlike.astype(np.int8), [0]])))
    stretches = list(zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True))
    said = [f"{moment_text(begin + SECOND * low)} for {high - low} s: the ledger says {what(given[low])}, the readings make "
            f"{what(made[low])}" for low, high in stretches[:LISTED]]
    return said + ([f"{len(stretches) - LISTED} more stretches"] if len(stretches) > LISTED else [])


def totals_of(klass, doubt):
    """Seconds of each class."""
    counts = {f"{name}_s": int((klass == place).sum()) for name, place in
              (("good", GOOD), ("below_limit", BELOW), ("untrusted", UNTRUSTED), ("no_reading", NO_READING))}
    return {"length_s": len(klass), **counts, "doubtful_s": int(doubt.sum())}


def check(folder):
    """All differences of a package, in words, and the totals that its readings make."""
    folder = Path(folder)
    faults = broken_files(folder)
    if not (folder / "data/run.json").is_file():
        return [*faults, "data/run.json is missing: this is no evidence package, or only a part of one"], {}
    run = json.loads((folder / "data/run.json").read_text(encoding="utf-8"))
    try:
        klass, doubt, differences = ledger_of(folder, run)
        begin = micros(run["run"]["from"])
        given, given_doubt, unclear = given_seconds(folder, begin, len(klass))
        said = json.loads((folder / "data/ledger.json").read_text(encoding="utf-8"))["totals"]
    except (OSError, ValueError, KeyError, TypeError) as error:
        return [*faults, f"the package cannot be read: {type(error).__name__}: {error}"], {}
    made = totals_of(klass, doubt)
    faults += differences + unclear
    faults += differing_seconds(begin, given, klass, lambda code: WORDS[code] if code >= 0 else "nothing")
    if (given == klass).all():
        faults += differing_seconds(begin, given_doubt, doubt, lambda is_doubtful: "doubtful" if is_doubtful else "not doubtful")
    faults += [f"data/ledger.json says {name} = {said.get(name)}, the readings make {value}"
               for name, value in made.items() if said.get(name) != value]
    return faults, made


def main(words):
    """Check the package in a folder; 0 where all agrees."""
    faults, made = check(Path(words[0]) if words else Path(__file__).resolve().parent)
    for fault in faults:
        print("DIFFERS: " + fault)                        # noqa: T201
    if made:
        print("The readings make: " + ", ".join(f"{name} {value}" for name, value in made.items()))     # noqa: T201
    print(f"{len(faults)} differences." if faults else "All agrees, to the second.")    # noqa: T201
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
