"""A laboratory's climate log with gaps through the command and the store.

Figures: uwarring82/Ba-Network, commit b955b6b3 (GitHub), data/dataset_20250101_20250112_with_timestamp.csv, CC BY 4.0;
recomputed independently with numpy and pandas for this project. The file is not part of it.
"""

import numpy as np
import pytest

from ingest.models import SetAside, Tap, TapKind
from tests.factories import make_tap
from tests.realdata.sets import all_readings, imported, table
from tests.reference.aligned import aligned

pytestmark = [pytest.mark.realdata, pytest.mark.django_db]

FILE = "lab_climate_gaps/climate_11d.csv.gz"
ROWS = 14_104
ALL_NEW = {"rows": ROWS, "stored": ROWS, "known": 0, "set_aside": 0, "lines_left_out": 1}


@pytest.fixture
def tap() -> Tap:
    tap = make_tap(kind=TapKind.CLIMATE, interval_s=None)
    assert imported(tap, FILE, "lab_climate.toml") == ALL_NEW
    return tap


def test_twice_changes_nothing(tap):
    before = all_readings(tap)
    assert imported(tap, FILE, "lab_climate.toml") == ALL_NEW | {"stored": 0, "known": ROWS}
    after = all_readings(tap)
    np.testing.assert_array_equal(before.at_us, after.at_us)
    np.testing.assert_array_equal(before.sequence, after.sequence)
    assert not SetAside.objects.exists()


def test_values_and_times_are_kept_to_the_last_bit(tap):
    readings, rows = all_readings(tap), table(FILE)
    stamps = rows["time_utc"].str.removesuffix("+00:00").astype("datetime64[us]")
    np.testing.assert_array_equal(readings.at_us, stamps.astype("int64"))
    for name in ("temperature_c", "humidity_pct", "pressure_hpa"):
        np.testing.assert_array_equal(readings.column(name), rows[name])


def test_gaps_stay_gaps(tap):
    """Median interval 13.317 s, 1,715 gaps over 60 s, 17 over 1 h, longest 30.685 h."""
    interval_s = np.diff(all_readings(tap).at_us) / 1e6
    assert np.median(interval_s) == pytest.approx(13.317, abs=5e-4)
    assert [(interval_s > 60).sum(), (interval_s > 3600).sum()] == [1715, 17]
    assert interval_s.max() / 3600 == pytest.approx(30.685, abs=5e-4)


@pytest.mark.parametrize(("tau_s", "adev_k", "pairs"), [
    (60, 0.014583, 4105), (300, 0.029352, 1518), (900, 0.051491, 636), (3600, 0.155986, 180)])
def test_allan_deviation_of_what_was_stored(tap, tau_s, adev_k, pairs):
    """Epoch-aligned bin means, adjacent bins only."""
    readings = all_readings(tap)
    assert aligned(readings.at_us, readings.column("temperature_c"), tau_s) == (pytest.approx(adev_k, abs=1e-6), pairs)


def test_joint_regression_of_the_refractive_index(tap):
    """n_1762 on T, RH, p: −9.767e-7 /K, −1.958e-8 /%, +2.591e-7 /hPa (0.1 %); on T alone −2.1965e-6 /K."""
    readings, index = all_readings(tap), table(FILE)["n_1762"].to_numpy()
    air = np.stack([readings.column(name) for name in ("temperature_c", "humidity_pct", "pressure_hpa")], axis=-1)
    centred = air - air.mean(axis=0)
    slopes = np.linalg.lstsq(centred, index - index.mean(), rcond=None)[0]
    np.testing.assert_allclose(slopes, [-9.767e-7, -1.958e-8, 2.591e-7], rtol=1e-3)
    alone = np.linalg.lstsq(centred[:, :1], index - index.mean(), rcond=None)[0]
    np.testing.assert_allclose(alone, [-2.1965e-6], rtol=1e-3)
