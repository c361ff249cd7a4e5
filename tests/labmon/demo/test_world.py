"""The ten benches' normal habits within JOB 8's figures, and the ledger's faults visible in the raw columns."""

import numpy as np
import pytest

from labmon.demo.benches import BENCHES, bench_named
from labmon.demo.faults import Ledger
from labmon.demo.moments import DAY_S, moment
from labmon.demo.world import SEED, World, wanted_state
from tests.labmon.demo.measured import is_beyond, measured, measured_angle_deg, measured_er_db


@pytest.fixture(scope="module")
def world():
    return World(15)


@pytest.fixture(scope="module")
def quiet():
    return World(5, ledger=Ledger(()))


def _span(first, last, step_s=1.0):
    return np.arange(first, last, step_s)


def test_the_lab_is_that_of_the_job():
    """JOB 8's table: bench, limit, warning (invented)."""
    limits = {bench.name: (bench.limit.alarm, bench.limit.warning) for bench in BENCHES}
    assert limits == {"N1": (36, 25), "N2": (20, 23), "N3": (17, 20), "S1": (20, 23), "S2": (25, 27), "N4": (15, 17),
                      "V1": (23, 25), "V2": (20, 23), "S3": (20, 14), "S4": (20, 22)}
    assert {bench.name for bench in BENCHES if bench.laser == "Beacon"} == {"N1", "N2", "N3"}


@pytest.mark.parametrize(("name", "low_db", "high_db"), [
    ("N2", 25.2, 41.5), ("S1", 25.2, 28.8), ("S2", 28.8, 31.3), ("N4", 17.0, 21.4), ("V1", 32.4, 33.6), ("V2", 30.6, 31.4),
    ("S4", 22.0, 26.2)])
def test_extinction_ratio_keeps_its_habit(quiet, name, low_db, high_db):
    """JOB 8, normal habits; 98 % of three quiet days must lie within the figures (detector noise included)."""
    bench = bench_named(name)
    er_db = measured_er_db(bench, quiet.readings(bench, _span(moment(2, 0), moment(5, 0), 7.0)))
    assert np.mean((er_db >= low_db) & (er_db <= high_db)) > 0.98


def test_n2_reaches_both_ends_of_its_swing(quiet):
    er_db = measured_er_db(bench_named("N2"), quiet.readings(bench_named("N2"), _span(moment(2, 0), moment(5, 0), 7.0)))
    low, high = np.quantile(er_db, [0.01, 0.99])
    assert low == pytest.approx(25.6, abs=0.4)
    assert high == pytest.approx(40.0, abs=1.0)


def test_n1_moves_three_to_eight_degrees_each_air_cycle(quiet):
    bench = bench_named("N1")
    sop = quiet.sop(bench, _span(moment(2, 0), moment(5, 0), 10.0))
    swings = [np.degrees(2 * np.arcsin(np.linalg.norm(part[:, None] - part[None], axis=-1).max() / 2))
              for part in sop[: len(sop) // 132 * 132].reshape(-1, 132, 3)]
    assert 3.0 < np.median(swings) < 8.0


def test_s3_moves_five_degrees_by_the_night_setback(quiet):
    bench = bench_named("S3")
    angles = []
    for number in (2, 3, 4):
        night, day = (quiet.sop(bench, _span(moment(number, hour), moment(number, hour + 3), 10.0)).mean(axis=0)
                      for hour in (3, 15))
        angles.append(np.degrees(np.arctan2(np.linalg.norm(np.cross(day, night)), day @ night)))
    assert np.median(angles) == pytest.approx(5.0, abs=1.2)


@pytest.mark.parametrize("bench", BENCHES, ids=lambda bench: bench.name)
def test_nothing_is_beyond_its_warning_without_a_fault(quiet, bench):
    values = measured(bench, quiet.readings(bench, _span(moment(1, 0), moment(4, 9), 11.0)))
    assert is_beyond(bench, values, bench.limit.warning).mean() < 0.002


@pytest.mark.parametrize("bench", BENCHES, ids=lambda bench: bench.name)
def test_same_seed_same_readings_in_any_pieces(world, bench):
    at_s = _span(moment(2, 5), moment(2, 7), 2.0)
    whole = world.readings(bench, at_s)
    again = World(4, SEED).readings(bench, at_s)
    pieces = [world.readings(bench, at_s[:900]), world.readings(bench, at_s[900:])]
    for name, column in whole.items():
        np.testing.assert_array_equal(column, again[name])
        np.testing.assert_array_equal(column, np.concatenate([piece[name] for piece in pieces]))


def test_another_seed_gives_other_readings(world):
    bench = bench_named("V2")
    at_s = _span(0.0, 100.0)
    assert not np.array_equal(world.readings(bench, at_s)["port1"], World(2, 5).readings(bench, at_s)["port1"])


def test_both_ports_carry_the_source_flicker(quiet):
    """JOB 2c: the slope of fast changes dn/dm is the true leak, free of zeros (the demo's zeros are not taken off here)."""
    bench = bench_named("V2")
    at_s = _span(moment(2, 12), moment(2, 14))
    columns = quiet.readings(bench, at_s)
    bright, dark = np.diff(columns["port1"]), np.diff(columns["port2"])
    true = quiet.leak(bench, at_s).mean()
    assert bright @ dark / (bright @ bright) == pytest.approx(true / (1 - true), rel=0.08)


def test_day_3_the_touch_on_n1_jumps_and_rests(world):
    bench = bench_named("N1")
    sop = world.sop(bench, np.array([moment(3, 11, 41, 59), moment(3, 11, 42, 0.4), moment(3, 11, 46)]))
    jump, rest = (np.degrees(np.arccos(sop[0] @ sop[number])) for number in (1, 2))
    assert jump == pytest.approx(14.0, abs=0.5)
    assert rest == pytest.approx(6.0, abs=2.5)


def test_day_4_lamps_add_the_same_power_to_both_ports_of_two_benches(world):
    """+0.25 µW on both ports of N2 and N4; nothing anywhere else."""
    at_s = _span(moment(4, 5, 30), moment(4, 5, 50))
    dark_lab = World(15, ledger=Ledger(tuple(row for row in world.ledger.rows if type(row).__name__ != "RoomLight")))
    for bench in BENCHES:
        lit, unlit = world.readings(bench, at_s), dark_lab.readings(bench, at_s)
        for name, column in lit.items():
            step = (column - unlit[name]).mean()
            gain = bench.head.gain_ratio if name.startswith("port2") else 1.0
            expected = 0.25e-6 * bench.head.units_per_w / gain if bench.name in ("N2", "N4") else 0.0
            assert step == pytest.approx(expected, rel=0.05, abs=1e-12), (bench.name, name)


def test_day_5_beacon_hops_at_the_same_second_on_its_three_benches(world):
    for name in ("N1", "N2", "N3"):
        bench = bench_named(name)
        columns = world.readings(bench, _span(moment(5, 16, 15), moment(5, 17)))
        power = columns.get("s0", columns.get("port1"))
        before, within = power[:280].mean(), power[310:440].mean()
        assert within / before == pytest.approx(0.979, abs=0.004)
    calm = bench_named("V2")
    power = world.readings(calm, _span(moment(5, 16, 15), moment(5, 17)))["port1"]
    assert power[310:440].mean() / power[:280].mean() == pytest.approx(1.0, abs=0.002)


def test_days_5_to_14_the_joint_of_s2_creeps_with_a_growing_swing(world):
    bench = bench_named("S2")
    days = [world.leak(bench, _span(moment(day, 0), moment(day + 1, 0), 30.0)) for day in (4, 9, 13, 14)]
    means = [-10 * np.log10(leak.mean()) for leak in days]
    assert means[0] == pytest.approx(30.0, abs=0.4)
    assert means[-1] == pytest.approx(24.8, abs=0.4)
    swings = [leak.max() - leak.min() for leak in days]
    assert swings[-1] > 1.5 * swings[0]
    below = {day: np.mean(measured_er_db(bench, world.readings(bench, _span(moment(day, 0), moment(day + 1, 0), 60.0))) < 25.0)
             for day in (12, 13)}
    assert below[12] < 0.01 < below[13]


def test_the_laser_of_s1_ages_hops_and_goes_off(world):
    bench = bench_named("S1")
    power = {day: world.readings(bench, _span(moment(day, 12), moment(day, 13)))["port1"].mean() for day in (1, 8)}
    assert power[8] / power[1] == pytest.approx(1 - 7 * 0.006 / (1 - 0.5 * 0.006), abs=0.003)
    off = world.readings(bench, _span(moment(10, 2), moment(10, 3)))
    assert off["port1"].mean() == pytest.approx(bench.head.zero1, rel=0.1)
    assert off["port2"].mean() == pytest.approx(bench.head.zero2, rel=0.1)
    fitted = world.readings(bench, _span(moment(10, 15), moment(10, 16)))
    assert fitted["port1"].mean() == pytest.approx(power[1], rel=0.02)


def test_day_6_n4_clips_and_seems_to_lose_three_decibels(world):
    """JOB 2b: power doubled against a clip at 1.03 of the old level reads 2.9 dB low (calculated)."""
    bench = bench_named("N4")
    at_s = _span(moment(6, 15), moment(6, 16))
    columns = world.readings(bench, at_s)
    assert np.mean(columns["port1"] == bench.head.top) > 0.99
    assert len(np.unique(columns["port2"])) > 100
    leak = world.leak(bench, at_s)
    seems_low = 10 * np.log10((1 - leak) / leak) - measured_er_db(bench, columns)
    assert np.median(seems_low) == pytest.approx(2.9, abs=0.15)
    old = world.readings(bench, _span(moment(6, 12), moment(6, 13)))["port1"]
    assert bench.head.top / old.mean() == pytest.approx(1.03, abs=0.01)


def test_day_7_the_dark_port_of_s4_freezes_and_the_bright_one_does_not(world):
    columns = world.readings(bench_named("S4"), _span(moment(7, 2), moment(7, 9, 30)))
    frozen = slice(13 * 60, 7 * 3600)
    assert len(np.unique(columns["port2"][frozen])) == 1
    assert len(np.unique(columns["port1"][frozen])) > 1000
    assert len(np.unique(columns["port2"][7 * 3600:])) > 1000


def test_day_8_v1_shows_a_wave_of_25_seconds(world):
    bench = bench_named("V1")
    columns = world.readings(bench, _span(moment(8, 12), moment(8, 13)))
    dark = columns["port2"] - bench.head.zero2
    power = np.abs(np.fft.rfft((dark - dark.mean()) * np.hanning(len(dark)))) ** 2
    power[:10] = 0.0
    assert len(dark) / np.argmax(power) == pytest.approx(25.0, abs=1.5)
    wave = dark[62:-62] - np.convolve(dark, np.full(125, 1 / 125), "valid")
    assert np.sqrt(2) * wave.std() / dark.mean() == pytest.approx(0.08, abs=0.006)
    earlier = world.readings(bench, _span(moment(8, 8), moment(8, 9)))["port2"]
    quiet = earlier[62:-62] - np.convolve(earlier, np.full(125, 1 / 125), "valid")
    assert quiet.std() < 0.2 * wave.std()


def test_day_9_the_air_fault_moves_the_benches_of_north_hall_only(world):
    calm = World(10, ledger=Ledger(tuple(row for row in world.ledger.rows if type(row).__name__ != "AirFault")))
    at_s = _span(moment(9, 15), moment(9, 16), 5.0)
    for bench in BENCHES:
        shift = measured(bench, world.readings(bench, at_s)) - measured(bench, calm.readings(bench, at_s))
        if bench.room == "North Hall":
            assert np.nanmax(np.abs(shift)) > 2.0, bench.name
        else:
            assert np.nanmax(np.abs(shift)) < 1e-9, bench.name


def test_day_10_s3_flips_its_third_stokes_parameter_only(world):
    """A false 40°: ellipticity +10° ↔ -10° (JOB 2b, calculated)."""
    bench = bench_named("S3")
    columns = world.readings(bench, _span(moment(10, 9, 10), moment(10, 9, 20)))
    angle = measured_angle_deg(bench, columns)
    assert np.median(angle[310:]) - np.median(angle[:290]) == pytest.approx(40.0, abs=7.0)
    back = columns | {"s3": np.where(np.arange(600) < 300, columns["s3"], -columns["s3"])}
    assert np.ptp(measured_angle_deg(bench, back)) < 3.0


def test_the_polarimeter_of_s3_sometimes_reads_more_light_than_there_is(world):
    """Degrees of polarization above 1 are common in real data: flagged, never refused."""
    columns = world.readings(bench_named("S3"), _span(moment(2, 0), moment(2, 1)))
    dop = np.sqrt(columns["s1"] ** 2 + columns["s2"] ** 2 + columns["s3"] ** 2) / columns["s0"]
    assert 0.02 < np.mean(dop > 1.0) < 0.3


def test_a_spare_board_sees_no_light(world):
    bench = bench_named("S4")
    columns = world.spare_readings(bench, _span(moment(13, 15), moment(13, 15, 5)))
    assert columns["port1"].mean() == pytest.approx(bench.head.zero1, rel=0.1)


def test_the_climate_follows_the_room(world):
    at_s = _span(0.0, 2 * DAY_S, 10.0)
    climate = world.climate("North Hall", at_s)
    np.testing.assert_allclose(climate["temperature_c"], world.air["North Hall"].at(at_s), atol=0.06)
    assert np.all((climate["humidity_pct"] > 20) & (climate["humidity_pct"] < 70))
    assert np.all((climate["pressure_hpa"] > 980) & (climate["pressure_hpa"] < 1040))


def test_wanted_state_of_s3_lies_at_the_azimuth_seam():
    assert wanted_state(bench_named("S3"))[0] < -0.9
