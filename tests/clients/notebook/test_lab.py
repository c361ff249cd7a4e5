"""What the frames hold: units in the names, UTC index, missing is missing."""

import math
from datetime import timedelta

import numpy as np
import pandas as pd
import pytest
from labmon_notebook.faults import NotSignedIn, NotThere, WrongQuestion
from labmon_notebook.lab import Lab

from tests.clients.notebook.conftest import NearDoor, asked
from tests.factories import NOON_US
from tests.labmon.api.conftest import write

SPAN = "2031-03-04T12:00:00Z/PT2M"
LONGER = "2031-03-04T12:00:00Z/PT3H"
NOON = pd.Timestamp("2031-03-04T12:00:00Z")


def test_stations_and_taps(near):
    stations, taps = near.stations(), near.taps()
    assert stations.index.tolist() == ["bench-a", "bench-b"] and stations.loc["bench-a", "tap_count"] == 3
    assert taps.index.tolist() == ["bench-a/air", "bench-a/in", "bench-a/sop", "bench-b/in"]
    assert str(taps["newest_at"].dtype) == "datetime64[us, UTC]"
    assert taps.loc["bench-a/in", "newest_at"] == NOON + pd.Timedelta("119s")
    assert taps.loc["bench-a/in", "room"] == "room 1"


def test_readings_have_the_hundredfold_ratio_of_20_db(near):
    """1 mW over 10 µW: 10 log10(100) = 20 dB, definition of the decibel."""
    frame = near.readings("bench-a/in", SPAN)
    assert len(frame) == 120 and str(frame.index.dtype) == "datetime64[us, UTC]" and frame.index.name == "at"
    assert frame.index[0] == NOON and frame.attrs["unit"] == "W" and frame.attrs["tap"] == "bench-a/in"
    np.testing.assert_allclose(frame["er_db"].astype(float), 20.0, rtol=0, atol=1e-9)
    np.testing.assert_allclose(frame["raw_port1_W"], 1e-3)
    assert frame["raw_temperature_c"].isna().all() and frame["sequence"].tolist() == list(range(120))
    assert str(frame["sequence"].dtype) == "Int64", "a whole number stays one where some are missing"


def test_readings_in_parts_are_the_same_as_all_at_once(near, read_lab, monkeypatch):
    write(read_lab.tap, from_us=NOON_US + 7_200_000_000, boot="boot-2", port1=np.full(60, 1e-3), port2=np.full(60, 1e-5))
    monkeypatch.setattr("labmon.api.chunks.READINGS_A_CHUNK", 50)
    parts = list(near.readings_in_parts("bench-a/in", LONGER))
    assert [len(part) for part in parts] == [0, 120, 60]
    pd.testing.assert_frame_equal(pd.concat(parts[1:]), near.readings("bench-a/in", LONGER))


def test_a_span_without_readings_is_an_empty_frame_with_its_columns(near):
    empty, full = near.readings("bench-a/in", "2030-01-01T00:00:00Z/P1D"), near.readings("bench-a/in", SPAN)
    assert len(empty) == 0 and empty.dtypes.equals(full.dtypes) and str(empty.index.dtype) == "datetime64[us, UTC]"


@pytest.mark.parametrize("ending", ["parquet", "arrow", "csv", "json"])
def test_saved_files_are_whole_or_not_there(near, tmp_path, ending):
    path = near.save_readings("bench-a/in", SPAN, tmp_path / f"in.{ending}")
    assert path.stat().st_size > 1000 and [one.name for one in tmp_path.iterdir()] == [f"in.{ending}"]
    if ending == "parquet":
        read = pd.read_parquet(path)
        np.testing.assert_allclose(read["er_db"], near.readings("bench-a/in", SPAN)["er_db"])
    with pytest.raises(NotThere):
        near.save_readings("bench-z/in", SPAN, tmp_path / f"other.{ending}")
    assert [one.name for one in tmp_path.iterdir()] == [f"in.{ending}"]


def test_a_history_names_its_quantity_and_a_gap_is_missing(near):
    frame = near.history("bench-a/in", ("2031-03-04T12:00:00Z", timedelta(minutes=4)), points=240)
    assert frame.columns.tolist() == ["min_er_db", "mean_er_db", "max_er_db", "trusted_share"]
    np.testing.assert_allclose(frame["mean_er_db"].dropna(), 20.0, atol=1e-6)
    assert frame["mean_er_db"].isna().any() and frame.attrs["bucket_s"] > 0 and frame.index.is_monotonic_increasing


def test_now_is_a_row_a_tap(near):
    frame = near.now("bench-a/in", "bench-a/sop")
    assert frame.index.tolist() == ["bench-a/in", "bench-a/sop"]
    assert frame.loc["bench-a/in", "er_db"] == pytest.approx(20.0) and math.isnan(frame.loc["bench-a/in", "sop1"])
    assert frame.loc["bench-a/sop", "sop1"] == pytest.approx(0.98 / math.hypot(0.98, 0.1))
    assert str(frame["taken_at"].dtype) == "datetime64[us, UTC]"


def test_statistics_come_as_tables(near):
    told = near.statistics("bench-a/sop", SPAN)
    assert told.figures["readings"] == 120 and told.figures["er.count"] == told.facts["er"]["count"]
    assert told.allan.index.names == ["component", "tau_s"] and len(told.allan) and not told.displacement.empty
    assert "er.count" in told._repr_html_()
    np.testing.assert_allclose(near.statistics("bench-a/in", SPAN).quantiles["er_db"], 20.0, atol=0.05)


def test_alarms_are_asked_page_by_page(near, read_lab, monkeypatch):
    from tests.labmon.api.test_alarms import make_alarm

    for _ in range(5):
        make_alarm(read_lab.tap, quantity="")
    monkeypatch.setattr("labmon_notebook.paging.PAGE", 2)
    assert len(near.alarms()) == 5 and len(asked(near)) == 3
    assert len(near.alarms(most=3)) == 3 and len(asked(near)) == 5
    assert near.alarms().index.is_monotonic_decreasing


def test_empty_lists_are_frames_with_columns(near):
    assert near.alarms().empty and "raised_at" in near.alarms() and near.holds().empty and "until" in near.holds()


@pytest.mark.parametrize("span", ["yesterday", "2031-03-04T12:00:00Z", ("2031-03-04", "2031-03-05"), 3,
                                  ("2031-03-04T12:00:00Z", "2031-03-04T11:00:00Z"), ("noon", "later")])
def test_a_span_that_is_none_is_refused_before_anything_is_sent(near, span):
    with pytest.raises(ValueError, match="write|zone|Change"):
        near.readings("bench-a/in", span)
    assert asked(near) == []


def test_times_of_any_zone_name_the_same_span(near):
    berlin = (pd.Timestamp("2031-03-04T13:00", tz="Europe/Berlin"), pd.Timestamp("2031-03-04T13:02", tz="Europe/Berlin"))
    assert len(near.readings("bench-a/in", berlin)) == 120
    assert asked(near)[0][2]["span"] == ["2031-03-04T12:00:00.000000Z/2031-03-04T12:02:00.000000Z"]


def test_faults_say_what_to_do(near, read_lab):
    with pytest.raises(NotThere, match="tap"):
        near.history("bench-z/in", SPAN)
    with pytest.raises(WrongQuestion, match="8 days") as caught:
        near.statistics("bench-a/in", "2031-03-04T00:00:00Z/P9D")
    assert caught.value.field == "span"
    with pytest.raises(NotSignedIn, match="manager makes a new one"):
        Lab("", door=NearDoor("person-wrong")).stations()
    with pytest.raises(ValueError, match="station/tap"):
        near.now("bench-a")


def test_a_guest_sees_named_benches_only(read_lab):
    assert Lab("", door=NearDoor(read_lab.guest.key)).stations().index.tolist() == ["bench-a"]


def test_the_key_is_never_shown(near):
    assert near._door._key not in repr(near) and near._door._key.startswith("person-")


@pytest.mark.parametrize("given", [{}, {"key": "two words"}])
def test_a_missing_key_is_said_before_anything_is_asked(given, monkeypatch):
    monkeypatch.delenv("LABMON_PERSON_KEY", raising=False)
    with pytest.raises(ValueError, match="/you/"):
        Lab("http://labmon.example:8000", **given)


def test_a_key_comes_from_a_file_or_the_environment(tmp_path, monkeypatch):
    (tmp_path / "key").write_text("person-abc\n")
    assert Lab("http://labmon.example", key_file=tmp_path / "key")._door._key == "person-abc"
    monkeypatch.setenv("LABMON_PERSON_KEY", "person-def")
    assert Lab("http://labmon.example")._door._key == "person-def"
