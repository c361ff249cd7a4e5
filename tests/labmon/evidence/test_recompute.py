"""The script within the package: written apart from the server's code, it must find the same class for every second."""

import json
import shutil
import subprocess
import sys

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ingest.models import TapKind
from ingest.store.append import write_blocks
from ingest.times import at_of
from labmon.evidence import recompute
from tests.factories import make_station, make_tap
from tests.labmon.evidence.conftest import HOUR, MINUTE, NOON_US, SECOND_US, calibrate, rule, run_of, unpacked, write_er, written

SAME = ("length_s", "good_s", "below_limit_s", "untrusted_s", "no_reading_s", "doubtful_s")


def agrees(run, folder):
    """The script finds no difference; what the package says."""
    content, totals = written(run)
    faults, made = recompute.check(unpacked(content, folder))
    assert faults == [] and made == {name: totals[name] for name in SAME}
    return totals


def test_the_job_papers_ten_hours_agree(ten_hours, tmp_path):
    agrees(ten_hours, tmp_path)


def test_it_runs_alone_with_numpy_and_pandas_only(ten_hours, tmp_path):
    """As somebody else would: the unpacked folder, a Python that cannot import anything of ours or of the server."""
    bag = unpacked(written(ten_hours)[0], tmp_path)
    (tmp_path / "guard").mkdir()
    for name in ("labmon", "analysis", "ingest", "django", "scipy", "pyarrow"):
        (tmp_path / "guard" / f"{name}.py").write_text("raise SystemExit('not to be imported')\n" if name != "pyarrow" else
                                                       "raise ImportError('not here')\n")
    done = subprocess.run([sys.executable, bag / "recompute.py"], cwd=tmp_path, env={"PYTHONPATH": str(tmp_path / "guard")},
                          capture_output=True, text=True)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "good_s 32400" in done.stdout and "All agrees, to the second." in done.stdout


def tampered(bag, name, change):
    """The bag with one file changed and its manifests made right again, as somebody with intent would."""
    path = bag / name
    path.write_text(change(path.read_text(encoding="utf-8")), encoding="utf-8")
    for manifest in ("manifest-sha256.txt", "tagmanifest-sha256.txt"):
        lines = [line.partition("  ")[2] for line in (bag / manifest).read_text().splitlines()]
        (bag / manifest).write_text("".join(f"{recompute.sha256_of(bag / one)}  {one}\n" for one in lines))


def line_changed(number, change):
    def changed(text):
        lines = text.splitlines(keepends=True)
        lines[number] = change(lines[number])
        return "".join(line for line in lines if line)
    return changed


def dark_port_changed(line):
    """A row whose dark port reads a thousandth more."""
    cells = line.split(",")
    place = next(place for place, cell in enumerate(cells) if cell and cell[:2] in ("1.", "9.") and place == RAW_PORT2)
    return ",".join([*cells[:place], repr(float(cells[place]) * 1.001), *cells[place + 1:]])


RAW_PORT2 = 8       # the ninth column of a two-port tap's table


@pytest.mark.parametrize(("name", "change", "said"), [
    ("data/readings/bench-a__in.csv", line_changed(100, dark_port_changed), "row 101"),
    ("data/readings/bench-a__in.csv", line_changed(4000, lambda line: ""), "34199 rows; data/run.json says 34200"),
    ("data/ledger.csv", lambda text: text.replace("below limit", "good", 1),
     "2024-03-04T13:00:00.000000Z for 1200 s: the ledger says good, the readings make below limit"),
    ("data/ledger.json", lambda text: text.replace('"good_s": 32400', '"good_s": 33600'),
     "good_s = 33600, the readings make 32400"),
    ("data/run.json", lambda text: text.replace('"alarm": 20.0', '"alarm": 18.0'),
     "the ledger says below limit, the readings make good"),
    ("data/run.json", lambda text: text.replace('"zero2": 0.0', '"zero2": 3e-07'), "er_db is given as"),
])
def test_tampering_is_named_even_where_the_manifests_were_made_right(ten_hours, tmp_path, name, change, said):
    bag = unpacked(written(ten_hours)[0], tmp_path)
    tampered(bag, name, change)
    faults, _ = recompute.check(bag)
    assert any(said in fault for fault in faults), faults[:3]
    assert not any("SHA-256" in fault for fault in faults)


def test_a_changed_byte_a_lost_and_an_added_file_are_named(ten_hours, tmp_path):
    bag = unpacked(written(ten_hours)[0], tmp_path)
    (bag / "data/statement.txt").write_text("All was well.")
    (bag / "data/report.html").unlink()
    (bag / "data/more.csv").write_text("1")
    faults, _ = recompute.check(bag)
    assert [fault.split(" ")[0] for fault in faults] == ["data/report.html", "data/statement.txt", "data/more.csv"]


def test_a_folder_that_is_none_says_so(tmp_path):
    faults, made = recompute.check(tmp_path)
    assert "data/run.json is missing" in faults[-1] and made == {}


def test_a_ledger_with_a_hole_or_an_overlap_is_named(ten_hours, tmp_path):
    bag = unpacked(written(ten_hours)[0], tmp_path)
    shutil.copy(bag / "data/ledger.csv", tmp_path / "kept.csv")
    tampered(bag, "data/ledger.csv", line_changed(3, lambda line: ""))
    assert any("says nothing of 6000 s" in fault for fault in recompute.check(bag)[0])


def test_settings_by_time_floors_leakage_and_both_wanted_ports(db, tmp_path):
    """A zero taken in the run, a leaky splitter, floors that make bounds, an old zero, the second port wanted."""
    tap = make_tap(make_station("bench-a"), "in", interval_s=1.0)
    calibrate(tap, wanted_port=2, floor1=2e-7, floor2=2e-7, leakage=[[0.999, 0.002], [0.001, 0.998]], zero1=1e-6, zero2=2e-6,
              zero_taken_at=at_of(NOON_US - 40 * 86_400 * SECOND_US))
    calibrate(tap, valid_from=NOON_US + 900 * SECOND_US, wanted_port=2, floor1=2e-5, floor2=2e-7, zero1=1.5e-6, gain_ratio=1.07,
              zero_taken_at=at_of(NOON_US + 900 * SECOND_US))
    random = np.random.default_rng(3)
    at_s = np.arange(HOUR)
    port2 = 1e-3 * (1 + 0.01 * random.standard_normal(HOUR))
    port1 = 1e-5 * (1 + 0.5 * np.sin(at_s / 100)) + 1e-6 * random.standard_normal(HOUR)
    write_blocks(tap, NOON_US + SECOND_US * at_s, {"port1": port1, "port2": port2}, boot="b", sequence=at_s,
                 arrival_us=NOON_US + SECOND_US * at_s)
    totals = agrees(run_of(tap, length_s=HOUR, limits=(("er_db", 21.0), ("power_w", 9.8e-4))), tmp_path)
    assert totals["good_s"] > 500 and totals["below_limit_s"] > 500 and totals["doubtful_s"] > 100


def test_a_frozen_port_and_two_devices_and_a_wrong_clock(db, tmp_path):
    tap = make_tap(make_station("bench-a"), "in", interval_s=1.0)
    at_s, er_db = np.arange(HOUR), np.full(HOUR, 30.0)
    random = np.random.default_rng(5)
    port2 = 1e-6 * (1 + 0.05 * random.standard_normal(HOUR))
    port2[2000:2600] = port2[1999]
    at_us = NOON_US + SECOND_US * at_s
    own_us = at_us.copy()
    own_us[100:200] += 10 * SECOND_US
    write_blocks(tap, at_us, {"port1": 1e-3 * 10 ** (0 * er_db), "port2": port2}, boot="b1", sequence=at_s,
                 arrival_us=at_us + SECOND_US, own_at_us=own_us)
    write_blocks(tap, at_us[3000:3100] + 400_000, {"port1": np.full(100, 1e-3), "port2": np.full(100, 3e-6)}, boot="b2",
                 sequence=np.arange(100), arrival_us=at_us[3000:3100] + SECOND_US)
    totals = agrees(run_of(tap, length_s=HOUR), tmp_path)
    assert totals["untrusted_s"] >= 600 - 30 + 100 and totals["doubtful_s"] == 100


@pytest.mark.parametrize(("interval_s", "unknown_s"), [(None, 40), (60.0, 0)])
def test_a_slow_tap_whose_last_reading_before_the_run_holds_into_it(db, tmp_path, interval_s, unknown_s):
    """A reading a minute, the first at -20 s; one is missing (two intervals: held), later five (a gap).

    Where no interval is declared, and the server does not know one yet, the ledger begins with too short a look back: the
    reading at -20 s holds for 1 s, and 40 s are missing.
    """
    tap = make_tap(make_station("bench-a"), "in", interval_s=interval_s)
    minutes = np.delete(np.arange(-30, 61), [41, 60, 61, 62, 63, 64])
    write_er(tap, minutes * MINUTE - 20, np.where(minutes == 10, 19.0, 25.0))
    totals = agrees(run_of(tap, length_s=HOUR), tmp_path)
    assert totals["no_reading_s"] == 5 * MINUTE + unknown_s and totals["below_limit_s"] == 2 * MINUTE
    assert totals["good_s"] == HOUR - 7 * MINUTE - unknown_s


def test_several_taps_of_every_kind_and_unit(db, tmp_path):
    station = make_station("bench-a")
    ports = make_tap(station, "in", unit="dBm", interval_s=1.0)
    dark = make_tap(station, "dark", kind=TapKind.DARK_PORT, unit="uW", interval_s=1.0)
    stokes = make_tap(station, "sop", kind=TapKind.STOKES, unit="mW", interval_s=1.0)
    angles = make_tap(station, "head", kind=TapKind.STOKES, unit="", interval_s=1.0)
    calibrate(dark, monitor_ratio=99.0, bright_nominal=900.0, floor2=0.05, leakage=[[1.0, 0.0], [0.001, 1.0]])
    calibrate(stokes, wanted_state=[1.0, 0.0, 0.0], handedness="ieee", saturation1=1.5)
    calibrate(angles, wanted_state=[1.0, 0.0, 0.0], valid_from=NOON_US + 600 * SECOND_US)
    random, count = np.random.default_rng(11), 1800
    at_s = np.arange(count)
    at_us = NOON_US + SECOND_US * at_s + 250_000

    def write(tap, **columns):
        write_blocks(tap, at_us, columns, boot="b", sequence=at_s, arrival_us=at_us)

    noise = random.standard_normal
    write(ports, port1=0.01 * noise(count), port2=-23 + 2 * np.sin(at_s / 200) + 0.05 * noise(count))
    monitor = np.where(at_s % 500 < 40, np.nan, 9.0 + 0.01 * noise(count))
    write(dark, port2=4 + 2 * np.sin(at_s / 90) + 0.02 * noise(count), monitor=monitor)
    angle = 0.2 + 0.15 * np.sin(at_s / 150)
    write(stokes, s0=np.where(at_s > 1700, 1.6, 1.0), s1=np.cos(angle), s2=np.sin(angle) + 0.001 * noise(count),
          s3=np.where(at_s < 100, 0.3, 0.001) * noise(count))
    write(angles, azimuth_deg=4 + 2 * np.sin(at_s / 300) + 0.01 * noise(count), ellipticity_deg=0.05 * noise(count),
          dop=0.998 + 0.001 * noise(count))
    run = run_of(ports, dark, length_s=count, limits=(("er_db", 21.5),))
    run.experiment.taps.add(stokes, angles)
    for tap, limits in ((stokes, (("angle_deg", 15.0), ("dop", 0.9), ("er_db", 15.0))), (angles, (("er_db", 20.0),))):
        run.run_taps.create(tap=tap)
        for quantity, alarm in limits:
            rule(run, tap, quantity, alarm, at_of(NOON_US))
    totals = agrees(run, tmp_path)
    assert min(totals[name] for name in ("below_limit_s", "untrusted_s")) > 50


def test_a_tap_without_limits_has_no_good_second(db, tmp_path):
    tap = make_tap(make_station("bench-a"), "in", interval_s=1.0)
    write_er(tap, np.arange(60), 30.0)
    assert agrees(run_of(tap, length_s=120, limits=()), tmp_path)["untrusted_s"] == 60


def test_a_run_without_any_reading(db, tmp_path):
    tap = make_tap(make_station("bench-a"), "in", interval_s=1.0)
    assert agrees(run_of(tap, length_s=120), tmp_path)["no_reading_s"] == 120


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(seed=st.integers(0, 2**32 - 1), per_second=st.sampled_from([0.1, 0.7, 1.0, 3.0, 10.0]), unsteady=st.booleans())
def test_any_readings_give_the_same_seconds(db, tmp_path_factory, seed, per_second, unsteady):
    """Random gaps, steps, frozen stretches, dark stretches, unsteady spacing; with and without a declared interval."""
    random = np.random.default_rng(seed)
    length_s = 400
    count = int((length_s + 60) * per_second)
    spacing = random.uniform(0.2, 1.8, count) if unsteady else np.ones(count)
    at_s = np.cumsum(spacing) / per_second - 30 + random.uniform(0, 1)
    keep = random.random(count) > random.choice([0.0, 0.05, 0.3])
    for _ in range(3):
        begin = random.integers(0, count)
        keep[begin:begin + random.integers(0, max(2, count // 8))] = False
    er_db = 21 + np.cumsum(random.standard_normal(count)) * 0.2
    port1 = 1e-3 * (1 + 0.02 * random.standard_normal(count))
    port2 = port1 / 10 ** (er_db / 10)
    frozen = random.integers(0, count)
    port2[frozen:frozen + random.integers(0, 80)] = port2[frozen]
    dark = random.integers(0, count)
    port1[dark:dark + count // 20], port2[dark:dark + count // 20] = 1e-8, 2e-8
    tap = make_tap(make_station(), "in", interval_s=random.choice([None, 1 / per_second]))
    calibrate(tap, floor1=1e-7, floor2=float(random.choice([1e-7, 4e-6])), saturation1=1.04e-3)
    at_us = NOON_US + np.round(at_s[keep] * 1e6).astype(np.int64)
    write_blocks(tap, at_us, {"port1": port1[keep], "port2": port2[keep]}, boot="b", sequence=np.flatnonzero(keep),
                 arrival_us=at_us)
    agrees(run_of(tap, length_s=length_s, experiment=f"any {tap.pk}"), tmp_path_factory.mktemp("any"))


def test_settings_are_json_a_person_can_read(ten_hours, tmp_path):
    said = json.loads((unpacked(written(ten_hours)[0], tmp_path) / "data/run.json").read_text())
    assert list(said) == ["form", "software", "made_at", "run", "ledger", "as_of", "declared_unusable", "taps"]
